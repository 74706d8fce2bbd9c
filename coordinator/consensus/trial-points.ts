import { clipToBounds, type Penalty, penaltyValue } from '../../numerics/penalty.js';
import { plusScaled } from '../../numerics/vector.js';

/** Step lengths along Δ tried with curvature, and those tried by value alone. */
const TRIALS = [1, 0.3, 2] as const;
const LINE = [0.1, 0.03, 0.01, 0.003] as const;
/** Relative rise of F that counts as rounding. */
const RISE_SLACK = 1e-14;

/** Where a second-order method stands: z with f, F = f + g and ∇f. */
export interface Standing {
  readonly z: Float64Array;
  readonly loss: number;
  readonly objective: number;
  readonly gradient: Float64Array;
}

/** With the curvature measured at z (row-major p × p). */
export interface Iterate extends Standing {
  readonly curvature: Float64Array;
  /** Its floored diagonal. */
  readonly diagonal: Float64Array;
}

export const standingAt = (
  { penalty }: { readonly penalty: Penalty },
  z: Float64Array,
  loss: number,
  gradient: Float64Array,
): Standing => ({ z, loss, objective: loss + penaltyValue(penalty, z), gradient });

/** z + tΔ for each trial length, clipped to the bounds. */
export const trialPoints = (g: Penalty, z: Float64Array, direction: Float64Array): Float64Array[] =>
  TRIALS.map((t) => clipToBounds(g, plusScaled(z, t, direction)));

export const linePoints = (g: Penalty, z: Float64Array, direction: Float64Array): Float64Array[] =>
  LINE.map((t) => clipToBounds(g, plusScaled(z, t, direction)));

/** Index of the trial with the least F, if that is not above F at z. */
export function bestTrial(
  g: Penalty,
  here: Standing,
  trials: readonly Float64Array[],
  losses: readonly number[],
): number | null {
  const best = leastObjective(g, trials, losses);
  return isNoRise(here, best.objective) ? best.index : null;
}

/** Whether F has not risen above F at z, rounding aside. */
export const isNoRise = (here: Standing, objective: number): boolean =>
  objective <= here.objective + RISE_SLACK * Math.max(Math.abs(here.objective), 1e-12);

/** Index of the line point with the least F, if that is below F at z. */
export function bestLinePoint(
  g: Penalty,
  here: Standing,
  points: readonly Float64Array[],
  losses: readonly number[],
): number | null {
  const best = leastObjective(g, points, losses);
  return best.objective < here.objective ? best.index : null;
}

function leastObjective(
  g: Penalty,
  points: readonly Float64Array[],
  losses: readonly number[],
): { index: number; objective: number } {
  let index = 0;
  let objective = Number.POSITIVE_INFINITY;
  points.forEach((point, k) => {
    const value = losses[k] + penaltyValue(g, point);
    if (value < objective) {
      index = k;
      objective = value;
    }
  });
  return { index, objective };
}
