import { dot, norm } from '../../numerics/vector.js';
import type { SiteMetric } from './site-metric.js';

/** The normalised residuals of consensus ADMM (Wohlberg 2017): both free of units, both zero at an optimum. */
export interface Residuals {
  readonly primal: number;
  readonly dual: number;
}

/**
 * r_p = ‖x − z‖ / max(‖x‖, √K‖z‖) and r_d = ‖M(z − z_old)‖ / ‖M u‖, norms over all sites stacked;
 * u_i = s_i − z scaled duals.
 */
export function normalisedResiduals(
  x: readonly Float64Array[],
  z: Float64Array,
  zOld: Float64Array,
  s: readonly Float64Array[],
  { scales, diagonal }: SiteMetric,
): Residuals {
  let apart = 0;
  let size = 0;
  let moved = 0;
  let dual = 0;
  for (const [i, local] of x.entries()) {
    size += dot(local, local);
    const own = s[i];
    const scale = scales[i];
    for (let j = 0; j < z.length; j++) {
      apart += (local[j] - z[j]) ** 2;
      const m = scale * diagonal[j];
      moved += (m * (z[j] - zOld[j])) ** 2;
      dual += (m * (own[j] - z[j])) ** 2;
    }
  }
  const least = 1e-300;
  return {
    primal: Math.sqrt(apart) / Math.max(Math.sqrt(size), Math.sqrt(x.length) * norm(z), least),
    dual: Math.sqrt(moved) / Math.max(Math.sqrt(dual), least),
  };
}

/** Rounds of normalised residual balancing at the start of a run; a fixed metric afterwards converges. */
const BALANCING_ROUNDS = 20;
const BALANCED_WITHIN = 2;
const FACTOR_MOST = 5;

/** Factor on all metrics that brings the residuals together: √(r_p / r_d) clipped, or 1 where they are close. */
export function balancingFactor(residuals: Residuals, round: number): number {
  if (round > BALANCING_ROUNDS) return 1;
  const ratio = residuals.primal / Math.max(residuals.dual, 1e-300);
  if (ratio >= 1 / BALANCED_WITHIN && ratio <= BALANCED_WITHIN) return 1;
  return Math.min(Math.max(Math.sqrt(ratio), 1 / FACTOR_MOST), FACTOR_MOST);
}
