import type { RowState } from '../../numerics/kernels/kernel.js';
import { allFinite } from '../../numerics/vector.js';
import type { Checked } from '../../protocol/failure.js';
import { succeed } from '../../protocol/failure.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { notFinite } from './failures.js';
import { aboutMeans, alongIntercept, atBestIntercept, curvatureMeans } from './intercept.js';
import type { PartSolvers } from './part-solvers.js';
import { rowPass, rowState } from './row-pass.js';

/** All rows of a site at a point: predictors and slopes, the intercept of its own included where it has one. */
export interface AtPoint {
  readonly shard: Shard;
  readonly loss: Loss;
  /** Coefficients of the shard's columns. */
  readonly point: Float64Array;
  readonly rows: RowState;
  /** Curvature-weighted column means, the own intercept first; null where there is none. */
  readonly means: Float64Array | null;
  /** ∇φ by the shard's columns. */
  readonly gradient: Float64Array;
}

export function atPoint({ whole, loss, ownIntercept }: PartSolvers, theta: Float64Array): Checked<AtPoint> {
  const point = ownIntercept ? atBestIntercept(whole, loss, theta) : theta;
  const rows = rowState(whole.rowCount);
  const gradient = new Float64Array(whole.p);
  rowPass(whole, loss, point, rows, gradient);
  const means = ownIntercept ? curvatureMeans(whole, loss, rows.eta) : null;
  if (!allFinite(gradient)) return notFinite('The gradient');
  return succeed({ shard: whole, loss, point, rows, means, gradient });
}

/** A sum over rows of multiples of their columns, by the coefficients of the run. */
export const byCoefficients = ({ means }: Pick<AtPoint, 'means'>, sum: Float64Array): Float64Array =>
  means === null ? sum : alongIntercept(sum, means);

/** The same for a packed sum of products of columns. */
export const productsByCoefficients = (
  { means }: Pick<AtPoint, 'means'>,
  packed: Float64Array,
): Float64Array => (means === null ? packed : aboutMeans(packed, means));

/** (y − μ)² / V(μ) of a row, signed and rooted: 0 where the mean is met exactly, as in a limit without variance. */
export function pearsonResidual(loss: Loss, y: number, eta: number): number {
  const mean = loss.mean(eta);
  return y === mean ? 0 : (y - mean) / Math.sqrt(loss.variance(mean));
}

/** Σ w (y − μ)² / V(μ). */
export function pearsonSum({ y, weights }: Shard, loss: Loss, eta: Float64Array): number {
  let sum = 0;
  for (let r = 0; r < y.length; r++) {
    const residual = pearsonResidual(loss, y[r], eta[r]);
    sum += (weights === null ? 1 : weights[r]) * residual * residual;
  }
  return sum;
}
