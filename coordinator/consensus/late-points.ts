import { penaltyValue } from '../../numerics/penalty.js';
import type { SiteModel } from './late-models.js';
import { diagonalOf, flooredDiagonal } from './metric.js';
import type { ConsensusProblem } from './problem.js';
import type { Iterate } from './trial-points.js';

/** A point that sites are asked about. */
export interface LatePoint {
  readonly z: Float64Array;
  /** Where it was reached from, and the decrease of m + g promised on the way; null for the first. */
  readonly from: { readonly z: Float64Array; readonly promised: number } | null;
  /** Per site: φ_i, ∇φ_i and H_i here, the latter measured where it was asked. */
  readonly answers: (SiteModel | null)[];
}

export const latePoint = (
  problem: ConsensusProblem,
  z: Float64Array,
  from: LatePoint['from'],
): LatePoint => ({ z, from, answers: problem.siteWeights.map(() => null) });

/** What all sites measured at one point, summed in roster order. Null where an answer, or curvature of this point, is missing. */
export function iterateAt(problem: ConsensusProblem, { z, answers }: LatePoint): Iterate | null {
  const { p } = problem;
  const curvature = new Float64Array(p * p);
  const gradient = new Float64Array(p);
  let loss = 0;
  for (const answer of answers) {
    if (answer === null || !answer.measured) return null;
    loss += answer.value;
    for (let j = 0; j < p; j++) gradient[j] += answer.gradient[j];
    for (let k = 0; k < p * p; k++) curvature[k] += answer.curvature[k];
  }
  const objective = loss + penaltyValue(problem.penalty, z);
  return { z, loss, objective, gradient, curvature, diagonal: flooredDiagonal(diagonalOf(curvature, p)) };
}
