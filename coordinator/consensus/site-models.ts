import { leastSubgradient, type Penalty } from '../../numerics/penalty.js';
import { dot, norm, plusScaled, subtract, sumOf } from '../../numerics/vector.js';
import type { Extrapolation, Iteration } from './acceleration.js';
import { type ModelStep, modelStep } from './certificate.js';
import { symmetricTimes } from './matrix.js';
import { definiteMetric, diagonalOf } from './metric.js';
import type { SiteMetric } from './site-metric.js';

/** An SR1 update is skipped where its denominator is this small a share of the lengths in it. */
const DENOMINATOR_LEAST = 1e-8;
/** A secant along which the gradient changed this many times more than the model tells comes from outside its region. */
const SURPRISE_MOST = 100;
/** Floor of the pooled model's diagonal, as a share of the pooled diagonal curvature at the start. */
const DIAGONAL_SHARE = 1e-3;
/** Smallest eigenvalue credited to indefinite summed models where a certificate rests on them, in that diagonal's scale. */
const LEARNED_FLOOR = 1e-4;
/** A proposal's residual may grow this much: a step of the models is not monotone in it. */
const GROWTH_MOST = 2;
/**
 * Trust radius: how far a step may move the linear predictor (root mean square, by the model). Grows with every step
 * that is kept, shrinks with every one thrown away.
 */
const RADIUS_FIRST = 2;
const RADIUS_GROWTH = 2;
const RADIUS_SHRINKAGE = 4;

/**
 * A quadratic model of every φ_i, learned at the coordinator: it begins with curvature measured once and follows the
 * free pairs of consensus ADMM: a proximal point x_i brings its own gradient ∇φ_i(x_i) = M_i(v_i − x_i). Each model is
 * exact in value of the gradient at its latest point and updated by symmetric rank-one secants (Conn, Gould, Toint
 * 1991). Matrices row-major p × p, one per site, in roster order.
 */
export class SiteModels implements Extrapolation {
  readonly growthMost = GROWTH_MOST;
  private radius = RADIUS_FIRST;
  /** The decrease of the objective that the models promised for their last step; none was promised before the first. */
  promised = Number.POSITIVE_INFINITY;

  constructor(
    private readonly g: Penalty,
    private readonly points: Float64Array[],
    private readonly gradients: Float64Array[],
    private readonly curvatures: Float64Array[],
    /** D, the pooled diagonal curvature at the start. */
    private readonly diagonal: Float64Array,
  ) {}

  /** New gradients at new points: one secant per site. */
  learn(points: readonly Float64Array[], gradients: readonly Float64Array[]): void {
    for (const [i, point] of points.entries()) this.learnOf(i, point, gradients[i]);
  }

  /** A new gradient of one site at a new point: one secant. */
  learnOf(site: number, point: Float64Array, gradient: Float64Array): void {
    const step = subtract(point, this.points[site]);
    const yardstick =
      dot(
        step,
        step.map((value, j) => this.diagonal[j] * value),
      ) / this.points.length;
    addSecant(this.curvatures[site], step, subtract(gradient, this.gradients[site]), yardstick);
    this.points[site] = point;
    this.gradients[site] = gradient;
  }

  /** Curvature measured anew at one point: the models begin again there. */
  measure(
    point: Float64Array,
    gradients: readonly Float64Array[],
    curvatures: readonly Float64Array[],
  ): void {
    curvatures.forEach((curvature, i) => {
      this.points[i] = point;
      this.gradients[i] = gradients[i];
      this.curvatures[i] = curvature;
    });
  }

  propose({ metric, z, centers, x }: Iteration): Float64Array[] | null {
    this.learn(x, metric.gradients(centers, x));
    this.radius *= RADIUS_GROWTH;
    return this.step(metric, z);
  }

  rejected(): void {
    this.radius /= RADIUS_GROWTH * RADIUS_SHRINKAGE;
  }

  /** The models are of the sites, not of the map: they stay. */
  clear(): void {}

  /**
   * The s whose consensus step is the minimiser of the summed models plus g, or a point on the way to it where it lies
   * beyond the trust radius, with each model's gradient there as the site's dual. Null where it cannot be computed.
   */
  step(siteMetric: SiteMetric, z: Float64Array): Float64Array[] | null {
    const p = z.length;
    const pooled = sumOf(this.curvatures);
    const floor = this.flooredDiagonal(pooled);
    const full = modelStep(this.g, definiteMetric(pooled, floor), sumOf(this.gradientsAt(z)), z);
    if (full === null) return null;
    this.promised = full.decrement;
    const moved = Math.sqrt(full.bend / (sum(this.diagonal) / p));
    const share = Math.min(1, this.radius / moved);
    const next = share < 1 ? plusScaled(z, share, full.direction) : full.z;
    const gradients = this.gradientsAt(next);
    // what the models' gradients leave of the subgradient is shared out, so that z stays where it was put
    const left = leastSubgradient(this.g, next, sumOf(gradients));
    const total = sum(siteMetric.scales);
    const fitting = gradients.map((own, i) => plusScaled(own, -siteMetric.scales[i] / total, left));
    return siteMetric.withDuals(next, fitting);
  }

  /** The minimiser of the summed models plus g, from z, where ∇f is known. Null where it cannot be computed. */
  stepFrom(z: Float64Array, gradient: Float64Array): ModelStep | null {
    const pooled = sumOf(this.curvatures);
    return modelStep(
      this.g,
      definiteMetric(pooled, this.flooredDiagonal(pooled), LEARNED_FLOOR),
      gradient,
      z,
    );
  }

  /** Diagonal of the summed models, kept positive. */
  private flooredDiagonal(pooled: Float64Array): Float64Array {
    return diagonalOf(pooled, this.diagonal.length).map((value, j) =>
      Math.max(value, DIAGONAL_SHARE * this.diagonal[j]),
    );
  }

  private gradientsAt(z: Float64Array): Float64Array[] {
    return this.points.map((point, i) => {
      const bend = symmetricTimes(this.curvatures[i], subtract(z, point));
      return bend.map((value, j) => value + this.gradients[i][j]);
    });
  }
}

const sum = (values: Iterable<number>): number => {
  let total = 0;
  for (const value of values) total += value;
  return total;
};

/** B ← B + r rᵀ / rᵀs with r = y − B s: the symmetric rank-one update that makes B s = y. */
export function addSecant(b: Float64Array, s: Float64Array, y: Float64Array, yardstick: number): void {
  const p = s.length;
  const r = subtract(y, symmetricTimes(b, s));
  const denominator = dot(r, s);
  const measured = dot(s, y);
  // an update may have left B indefinite: the yardstick is never less than the diagonal curvature at the start
  if (measured > SURPRISE_MOST * Math.max(measured - denominator, yardstick)) return;
  if (!(Math.abs(denominator) > DENOMINATOR_LEAST * norm(r) * norm(s))) return;
  for (let i = 0; i < p; i++) for (let j = 0; j < p; j++) b[i * p + j] += (r[i] * r[j]) / denominator;
}
