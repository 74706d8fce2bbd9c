import { leastSubgradient, type Penalty, penaltyValue } from '../../numerics/penalty.js';
import { dot, maxAbs, maxOf } from '../../numerics/vector.js';
import { zStepFull } from '../../numerics/z-step.js';
import { symmetricTimes } from './matrix.js';
import type { Certificate } from './method.js';
import type { ConsensusProblem } from './problem.js';
import type { Standing } from './trial-points.js';

/** Safety factor on a decrement measured with the curvature at z. */
const MEASURED_FACTOR = 1.5;
/**
 * The same where curvature may vanish: rows that a tiny step takes past their threshold can leave a fraction of the
 * curvature measured at z. Newton's method ends a piecewise quadratic in one exact step, so the factor costs a round.
 */
const VANISHING_FACTOR = 1000;
/** Safety factor on a decrement under a sketched curvature, and directions a round up to which it is an estimate. */
const SKETCHED_FACTOR = 10;
const ESTIMATE_COLUMNS_MOST = 2;
/** Safety factor on a decrement under models learned from the sites' proximal points. */
const LEARNED_FACTOR = 10;
/** Safety factor and floor of the estimate from diagonal curvature alone. */
const ESTIMATE_FACTOR = 30;
const ESTIMATE_FLOOR = 0.01;
/** Objectives smaller than this share of the one at the start count as it when a gap is made relative. */
const OBJECTIVE_LEAST = 1e-12;

/** What a decrement measured with the curvature at z is multiplied by to bound the gap. */
export const measuredFactor = ({
  curvatureMayVanish,
}: Pick<ConsensusProblem, 'curvatureMayVanish'>): number =>
  curvatureMayVanish ? VANISHING_FACTOR : MEASURED_FACTOR;

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

/** |F(z)|, or a small share of |F| at the start (1 where that is not given) where F(z) is nearer to zero than that. */
export const relativeTo = (objective: number, start = 1): number =>
  Math.max(Math.abs(objective), OBJECTIVE_LEAST * Math.abs(start), Number.MIN_VALUE);

/** What a step's decrement says of the relative gap; null where there is no step. */
export const gapOf = (here: { readonly objective: number } | null, step: ModelStep | null): number | null =>
  here === null || step === null ? null : step.decrement / relativeTo(here.objective);

/** Certificate from a decrement under the curvature measured at z itself. */
export function measuredCertificate(
  problem: Pick<ConsensusProblem, 'penalty' | 'curvatureMayVanish'>,
  z: Float64Array,
  gradient: Float64Array,
  decrement: number,
  objective: number,
): Certificate {
  const gap = measuredFactor(problem) * decrement;
  const kkt = maxAbs(leastSubgradient(problem.penalty, z, gradient));
  return { kind: 'measured', gap, relativeGap: gap / relativeTo(objective), kkt };
}

/**
 * Certificate from a decrement under a curvature learned from its products with directions, which credits little to
 * what was not measured. With one or two directions a round, or fewer than p in all, it is an estimate and says so.
 */
export function sketchedCertificate(
  { penalty: g, curvatureMayVanish, sketch }: ConsensusProblem,
  { z, gradient, objective }: Standing,
  decrement: number,
): Certificate {
  const gap = (curvatureMayVanish ? VANISHING_FACTOR : SKETCHED_FACTOR) * decrement;
  const kkt = maxAbs(leastSubgradient(g, z, gradient));
  const covered = sketch.columns > ESTIMATE_COLUMNS_MOST && sketch.columnsMost >= z.length;
  const kind = covered ? 'sketched' : 'estimate';
  return { kind, gap, relativeGap: gap / relativeTo(objective), kkt };
}

/**
 * Estimate where only the diagonal of the curvature may leave: the larger of 30 · ½ Σ κ_j² / max(H_jj, 0.01 max H) and
 * ten times the decrement under models learned on the way (null where there are none), which know the directions in
 * which the iteration creeps: those of strong correlation, where the diagonal alone was up to 1000 times too small. It
 * has no proof, and the result says that it is an estimate.
 */
export function estimatedCertificate(
  g: Penalty,
  z: Float64Array,
  gradient: Float64Array,
  diagonal: Float64Array,
  learned: number | null,
  objective: number,
  startObjective: number,
): Certificate {
  const kappa = leastSubgradient(g, z, gradient);
  const floor = ESTIMATE_FLOOR * maxOf(diagonal);
  let sum = 0;
  for (let j = 0; j < z.length; j++) sum += (kappa[j] * kappa[j]) / (Math.max(diagonal[j], floor) + g.l2[j]);
  const gap = Math.max(ESTIMATE_FACTOR * 0.5 * sum, LEARNED_FACTOR * (learned ?? 0));
  return {
    kind: 'estimate',
    gap,
    relativeGap: gap / relativeTo(objective, startObjective),
    kkt: maxAbs(kappa),
  };
}
