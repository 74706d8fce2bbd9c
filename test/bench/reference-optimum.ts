import { curvatureRung } from '../../coordinator/consensus/curvature-rung.js';
import type { MethodEnd } from '../../coordinator/consensus/method.js';
import { pooledRung } from '../../coordinator/consensus/pooled-rung.js';
import type { Penalty } from '../../numerics/penalty.js';
import { maxAbs } from '../../numerics/vector.js';
import type { Shard } from '../../worker/design/shard.js';
import type { LocalSolver } from '../../worker/local/local-solver.js';
import type { Loss } from '../../worker/losses/loss.js';
import { entriesOf } from '../support/dense.js';
import { driveMethods } from '../support/method-driver.js';
import { consensusProblem } from './measure.js';
import type { BenchProblem } from './problems.js';

/** What one machine with all rows finds. */
export interface Reference {
  /** Whether the problem has an optimum, and only one. */
  readonly nature: 'optimum' | 'rank-deficient' | 'separable';
  readonly z: Float64Array;
  /** F(z), by the sums of this file. */
  readonly objective: number;
  /** F(z) − F* is at most this if the optimum is within ten times the size of z, by the least subgradient at z. */
  readonly within: number;
}

/** Optima farther from z than this, per coordinate in units of |z_j| and the largest of them, are not considered. */
const REACH = 10;
/** Where no minimiser exists: a ridge that gives one, its own value left out. */
const RIDGE_TINY = 1e-9;
const FINEST_TOLERANCE = 1e-14;
/** A loss that runs off shows while curvature is left along its way; at the finest tolerance only rounding is. */
const NAMING_TOLERANCE = 1e-9;

/**
 * The pooled optimum by the curvature rung (the pooled one for squared loss) on one site with all rows, verified without that rung's code: F, ∇f and the
 * least subgradient κ are summed again row by row. κ is a subgradient of F at z, so that F* ≥ F(z) − Σ |κ_j| |z*_j − z_j|.
 */
export function referenceOptimum(problem: BenchProblem, pooled: LocalSolver, loss: Loss): Reference {
  const { reason, columnsAtFault, z } = solve(problem, problem.penalty, pooled, NAMING_TOLERANCE);
  if (reason === 'rank-deficient') {
    const penalty = copyOf(problem.penalty);
    for (const column of columnsAtFault) {
      penalty.lower[column] = 0;
      penalty.upper[column] = 0;
      penalty.l2[column] = 1;
    }
    // the same least value with the redundant columns held at zero, unless rows without curvature made them redundant
    const held = verified(problem, solve(problem, penalty, pooled).z, loss);
    const found = verified(problem, z, loss);
    return { ...(found.objective < held.objective ? found : held), nature: 'rank-deficient' };
  }
  if (reason === 'separable') {
    const penalty = copyOf(problem.penalty);
    for (let j = 0; j < problem.p; j++) penalty.l2[j] += RIDGE_TINY;
    return { ...verified(problem, solve(problem, penalty, pooled).z, loss), nature: 'separable' };
  }
  return { ...verified(problem, solve(problem, problem.penalty, pooled).z, loss), nature: 'optimum' };
}

function solve(
  problem: BenchProblem,
  penalty: Penalty,
  pooled: LocalSolver,
  tolerance = FINEST_TOLERANCE,
): MethodEnd {
  const alone = consensusProblem({ ...problem, penalty }, tolerance, Number.POSITIVE_INFINITY);
  const rung = problem.loss === 'squared' ? pooledRung : curvatureRung;
  return driveMethods([rung({ ...alone, siteWeights: [1] })], [pooled]).ends[0];
}

const copyOf = (penalty: Penalty): Penalty => ({
  l1: Float64Array.from(penalty.l1),
  l2: Float64Array.from(penalty.l2),
  lower: Float64Array.from(penalty.lower),
  upper: Float64Array.from(penalty.upper),
});

function verified(problem: BenchProblem, z: Float64Array, loss: Loss): Omit<Reference, 'nature'> {
  const { penalty: g } = problem;
  const gradient = gradientByRows(problem.pooled, loss, z);
  const size = maxAbs(z);
  let within = 0;
  for (let j = 0; j < z.length; j++) {
    // one-sided slopes of F: an optimum has left ≤ 0 ≤ right
    const smooth = gradient[j] + g.l2[j] * z[j];
    const left = smooth + (z[j] > 0 ? g.l1[j] : -g.l1[j]);
    const right = smooth + (z[j] >= 0 ? g.l1[j] : -g.l1[j]);
    const up = Math.min(REACH * (size + Math.abs(z[j])), g.upper[j] - z[j]);
    const down = Math.min(REACH * (size + Math.abs(z[j])), z[j] - g.lower[j]);
    within += Math.max(0, -right * up, left * down);
  }
  return { z, objective: objectiveByRows(problem, loss, z), within };
}

function gradientByRows(shard: Shard, loss: Loss, z: Float64Array): Float64Array {
  const { y, p, rowCount, offset } = shard;
  const x = entriesOf(shard);
  const gradient = new Float64Array(p);
  for (let i = 0; i < rowCount; i++) {
    const slope = loss.slope(y[i], predictor(x, p, i, z, offset));
    for (let j = 0; j < p; j++) gradient[j] += slope * x[i * p + j];
  }
  return gradient.map((value) => value / rowCount);
}

/** F(z) row by row; infinite outside the bounds. */
export function objectiveByRows({ pooled, penalty: g }: BenchProblem, loss: Loss, z: Float64Array): number {
  const { y, p, rowCount, offset } = pooled;
  const x = entriesOf(pooled);
  let sum = 0;
  for (let i = 0; i < rowCount; i++) sum += loss.value(y[i], predictor(x, p, i, z, offset));
  let penalty = 0;
  for (let j = 0; j < p; j++) {
    if (z[j] < g.lower[j] || z[j] > g.upper[j]) return Number.POSITIVE_INFINITY;
    penalty += g.l1[j] * Math.abs(z[j]) + 0.5 * g.l2[j] * z[j] * z[j];
  }
  return sum / rowCount + penalty;
}

function predictor(
  x: Float64Array,
  p: number,
  i: number,
  z: Float64Array,
  offset: Float64Array | null,
): number {
  let eta = offset === null ? 0 : offset[i];
  for (let j = 0; j < p; j++) eta += x[i * p + j] * z[j];
  return eta;
}
