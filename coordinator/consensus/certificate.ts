import { dot, maxAbs, maxOf } from '../../numerics/vector.js';
import { symmetricTimes } from './matrix.js';
import type { Certificate } from './method.js';
import { leastSubgradient, type Penalty, penaltyValue } from './penalty.js';
import { zStepFull } from './z-step.js';

/** Safety factor on a decrement measured with the curvature at z. */
const MEASURED_FACTOR = 1.5;
/** Safety factor and floor of the estimate from diagonal curvature alone. */
const ESTIMATE_FACTOR = 30;
const ESTIMATE_FLOOR = 0.01;
/** Objectives smaller than this count as this when a gap is made relative. */
const OBJECTIVE_LEAST = 1e-12;

/** A proximal Newton step from z and the decrease the quadratic model promises for it. */
export interface ModelStep {
  readonly z: Float64Array;
  readonly direction: Float64Array;
  /** e = −(∇f(z)ᵀΔ + ½ ΔᵀMΔ + g(z + Δ) − g(z)) ≥ 0. */
  readonly decrement: number;
  /** ΔᵀMΔ. */
  readonly bend: number;
  /** ∇f(z)ᵀΔ + ½ΔᵀMΔ: the change of f the model foretells. */
  readonly lossChange: number;
}

/**
 * The minimiser of the quadratic model of f at z plus g, and its decrement (Lee, Sun, Saunders 2014, §2).
 * Null where the metric (row-major p × p) is not positive definite.
 */
export function modelStep(
  g: Penalty,
  metric: Float64Array,
  gradient: Float64Array,
  z: Float64Array,
): ModelStep | null {
  const product = symmetricTimes(metric, z);
  const next = zStepFull(
    g,
    metric,
    product.map((value, j) => value - gradient[j]),
    z,
  );
  if (next === null) return null;
  const direction = next.map((value, j) => value - z[j]);
  const bend = dot(direction, symmetricTimes(metric, direction));
  const lossChange = dot(gradient, direction) + 0.5 * bend;
  const change = lossChange + penaltyValue(g, next) - penaltyValue(g, z);
  // the model is strongly convex, so its decrease is at least ½‖Δ‖²: guards the difference against rounding
  return { z: next, direction, decrement: Math.max(-change, 0.5 * bend), bend, lossChange };
}

export const relativeTo = (objective: number): number => Math.max(Math.abs(objective), OBJECTIVE_LEAST);

/** Certificate from a decrement under the curvature measured at z itself. */
export function measuredCertificate(
  g: Penalty,
  z: Float64Array,
  gradient: Float64Array,
  decrement: number,
  objective: number,
): Certificate {
  const gap = MEASURED_FACTOR * decrement;
  const kkt = maxAbs(leastSubgradient(g, z, gradient));
  return { kind: 'measured', gap, relativeGap: gap / relativeTo(objective), kkt };
}

/**
 * Estimate where only the diagonal of the curvature may leave: 30 · ½ Σ κ_j² / max(H_jj, 0.01 max H). It has no proof:
 * strong correlation can make it too small, and the result says that it is an estimate.
 */
export function estimatedCertificate(
  g: Penalty,
  z: Float64Array,
  gradient: Float64Array,
  diagonal: Float64Array,
  objective: number,
): Certificate {
  const kappa = leastSubgradient(g, z, gradient);
  const floor = ESTIMATE_FLOOR * maxOf(diagonal);
  let sum = 0;
  for (let j = 0; j < z.length; j++) sum += (kappa[j] * kappa[j]) / (Math.max(diagonal[j], floor) + g.l2[j]);
  const gap = ESTIMATE_FACTOR * 0.5 * sum;
  return { kind: 'estimate', gap, relativeGap: gap / relativeTo(objective), kkt: maxAbs(kappa) };
}
