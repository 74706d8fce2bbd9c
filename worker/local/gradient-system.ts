import { dot } from '../../numerics/vector.js';
import type { Shard } from '../design/shard.js';
import { squared } from '../losses/squared.js';
import type { NewtonSystem } from './newton-system.js';

/**
 * Steps end at a residual of this share of the gradient's, the nearer the optimum the less, so that Newton's method keeps
 * converging faster than linearly (Dembo, Eisenstat and Steihaug 1982).
 */
const SHARES = { most: 0.1, least: 1e-2 } as const;
/** More than any system of full accuracy has been seen to need; a step ended here is still one of descent. */
const ITERATIONS_MOST = 1000;

/**
 * Newton steps without a matrix: conjugate gradients (Hestenes and Stiefel 1952) on XᵀSX + M, preconditioned by its
 * diagonal. An iteration is one pass over the rows.
 */
export function gradientSystem(shard: Shard, metric: Float64Array): NewtonSystem {
  const { rowCount, p, rows } = shard;
  let curvatures: Float64Array = new Float64Array(rowCount);
  let diagonal: Float64Array = metric;
  // ½ S (x_r v)² summed has the gradient XᵀSXv
  const zeros = new Float64Array(rowCount);
  const times = (vector: Float64Array, out: Float64Array): void => {
    const data = { y: zeros, weights: curvatures, offset: null, rowCountTotal: 1 };
    rows.passes(data, squared, [{ theta: vector, state: null, gradient: out }]);
    for (let j = 0; j < p; j++) out[j] += metric[j] * vector[j];
  };
  return {
    factored: false,
    passesPerRefresh: 1,
    refresh(taken) {
      curvatures = taken;
      diagonal = metric.slice();
      rows.addWeightedSquares(0, rowCount, curvatures, diagonal);
      return diagonal.every((d) => d > 0 && d < Number.POSITIVE_INFINITY);
    },
    step: ({ gradient, magnitude }) => conjugateGradients(times, diagonal, gradient, magnitude),
  };
}

/** Nearly −A⁻¹ gradient. */
function conjugateGradients(
  times: (vector: Float64Array, out: Float64Array) => void,
  diagonal: Float64Array,
  gradient: Float64Array,
  magnitude: number,
): Float64Array {
  const p = gradient.length;
  const step = new Float64Array(p);
  const residual = gradient.map((value) => -value);
  const direction = residual.map((value, j) => value / diagonal[j]);
  const product = new Float64Array(p);
  let square = dot(residual, direction);
  const share = Math.min(SHARES.most, Math.max(SHARES.least, Math.sqrt(square / magnitude)));
  const target = share * share * square;
  for (let k = 0; k < ITERATIONS_MOST && square > target; k++) {
    times(direction, product);
    const bend = dot(direction, product);
    // nothing but rounding is left
    if (!(bend > 0)) break;
    const length = square / bend;
    let next = 0;
    for (let j = 0; j < p; j++) {
      step[j] += length * direction[j];
      residual[j] -= length * product[j];
      next += (residual[j] * residual[j]) / diagonal[j];
    }
    const kept = next / square;
    for (let j = 0; j < p; j++) direction[j] = residual[j] / diagonal[j] + kept * direction[j];
    square = next;
  }
  return step;
}
