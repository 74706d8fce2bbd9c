import { cholesky, choleskySolve } from '../cholesky.js';
import { weightedGram } from '../gram.js';
import { addWeightedRows, addWeightedSquares, rowProducts } from '../rows.js';
import { factorAccumulator } from '../triangular-factor.js';
import type { Kernel, KernelVariant, LossRows, PassPoint, PassValue, RowLoss } from './kernel.js';

/** Numbers of x that one block of a pass reads twice: it should still be in the cache the second time. */
const BLOCK_NUMBERS = 8192;

/** The twin in TypeScript: what the others are tested against, and what serves where there is no SIMD. */
export const plainKernel: Kernel = {
  name: 'plain',
  numbers: (count) => new Float64Array(count),
  rowProducts,
  addWeightedRows,
  addWeightedSquares,
  weightedGram,
  passes: (rows, loss, points) => rowPasses(plainKernel, rows, loss, points),
  curvatures: rowCurvatures,
  factorise(a, p) {
    const l = cholesky(a, p);
    return l === null ? null : { solve: (b) => choleskySolve(l, p, b) };
  },
  factorAccumulator,
};

export const plainVariant: KernelVariant = { name: 'plain', open: () => plainKernel };

/**
 * Passes with a loss taken row by row and the products of any kernel. Partial sums per block keep the rounding error of φ
 * far below n ulp.
 */
export function rowPasses(
  kernel: Pick<Kernel, 'rowProducts' | 'addWeightedRows'>,
  rows: LossRows,
  loss: RowLoss,
  points: readonly PassPoint[],
): PassValue[] {
  const { rowCount, p, x } = rows;
  const step = Math.max(4, 4 * Math.floor(BLOCK_NUMBERS / (4 * Math.max(p, 1))));
  const spare = { eta: new Float64Array(step), slopes: new Float64Array(step) };
  const sums = points.map(({ gradient }) => {
    gradient?.fill(0);
    return { value: 0, magnitude: 0 };
  });
  for (let from = 0; from < rowCount; from += step) {
    const to = Math.min(from + step, rowCount);
    points.forEach(({ theta, state, gradient }, k) => {
      const eta = state === null ? spare.eta.subarray(0, to - from) : state.eta.subarray(from, to);
      kernel.rowProducts(x, p, from, to, theta, eta);
      const block = blockLoss(rows, loss, eta, from, to);
      sums[k].value += block.value;
      sums[k].magnitude += block.magnitude;
      if (gradient === null) return;
      const slopes = state === null ? spare.slopes.subarray(0, to - from) : state.slopes.subarray(from, to);
      blockSlopes(rows, loss, eta, slopes, from);
      kernel.addWeightedRows(x, p, from, to, slopes, gradient);
    });
  }
  const { rowCountTotal: total } = rows;
  return sums.map(({ value, magnitude }) => ({ value: value / total, magnitude: magnitude / total }));
}

/** Adds the offset to the block's predictors and sums its losses. */
function blockLoss(rows: LossRows, loss: RowLoss, eta: Float64Array, from: number, to: number): PassValue {
  const { y, weights, offset } = rows;
  let value = 0;
  let magnitude = 0;
  for (let r = from; r < to; r++) {
    if (offset !== null) eta[r - from] += offset[r];
    const term = (weights === null ? 1 : weights[r]) * loss.value(y[r], eta[r - from]);
    value += term;
    magnitude += Math.abs(term);
  }
  return { value, magnitude };
}

function blockSlopes(
  rows: LossRows,
  loss: RowLoss,
  eta: Float64Array,
  slopes: Float64Array,
  from: number,
): void {
  const { y, weights, rowCountTotal } = rows;
  for (let i = 0; i < eta.length; i++) {
    const weight = (weights === null ? 1 : weights[from + i]) / rowCountTotal;
    slopes[i] = weight * loss.slope(y[from + i], eta[i]);
  }
}

/** See `Kernel.curvatures`. */
export function rowCurvatures(
  rows: Omit<LossRows, 'x' | 'p'>,
  loss: RowLoss,
  eta: Float64Array,
): Float64Array {
  const { y, weights, rowCountTotal } = rows;
  const out = new Float64Array(rows.rowCount);
  for (let r = 0; r < out.length; r++) {
    const weight = (weights === null ? 1 : weights[r]) / rowCountTotal;
    out[r] = weight * loss.curvature(y[r], eta[r]);
  }
  return out;
}
