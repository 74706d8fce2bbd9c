import { cholesky, choleskySolve } from '../../numerics/cholesky.js';
import { weightedGram } from '../../numerics/gram.js';
import { addWeightedRows, rowProducts } from '../../numerics/rows.js';
import { maxOf } from '../../numerics/vector.js';
import type { Shard } from '../design/shard.js';
import type { RowState } from './row-pass.js';
import { inRowSpace, pointFromRows, rowFactor, rowKernel } from './row-space.js';

/** Where the next Newton step starts from. */
export interface NewtonPoint {
  readonly x: Float64Array;
  /** Predictors and slopes of the rows at x. */
  readonly rows: RowState;
  /** Gradient of the proximal objective at x. */
  readonly gradient: Float64Array;
}

/** The linear systems of the Newton steps of one proximal problem. */
export interface NewtonSystem {
  /** Takes new row curvatures (w/N · ∂²loss/∂η²); false where the matrix cannot be factored. */
  refresh(curvatures: Float64Array): boolean;
  /** −(XᵀSX + M)⁻¹ gradient with the curvatures S taken last. */
  step(at: NewtonPoint): Float64Array;
  /** What a refresh costs, in passes over the rows. */
  readonly passesPerRefresh: number;
}

export const newtonSystem = (shard: Shard, metric: Float64Array, center: Float64Array): NewtonSystem =>
  inRowSpace(shard) ? rowSpaceSystem(shard, metric, center) : denseSystem(shard, metric);

/** Share of the largest diagonal entry added where the matrix does not factor; the direction stays one of descent. */
const LIFT = 1e-12;

function denseSystem(shard: Shard, metric: Float64Array): NewtonSystem {
  const { rowCount, p, x } = shard;
  let factor: Float64Array = new Float64Array(0);
  return {
    passesPerRefresh: p / 4 + (p * p) / (6 * rowCount),
    refresh(curvatures) {
      const a = weightedGram(x, rowCount, p, curvatures, 1);
      const diagonal = new Float64Array(p);
      for (let j = 0; j < p; j++) {
        a[j * p + j] += metric[j];
        diagonal[j] = a[j * p + j];
      }
      let made = cholesky(a, p);
      if (made === null) {
        const lift = LIFT * maxOf(diagonal);
        for (let j = 0; j < p; j++) a[j * p + j] += lift;
        made = cholesky(a, p);
      }
      if (made !== null) factor = made;
      return made !== null;
    },
    step: ({ gradient }) => choleskySolve(factor, p, gradient).map((value) => -value),
  };
}

/**
 * The same step through the rows. With S the row curvatures, ρ the slopes and η' = Xx, the minimiser of the quadratic
 * model is center + M⁻¹Xᵀα, α = S^½ b − ρ, (I + S^½ K S^½) b = S^½ (η' − X center + K ρ): no division by a curvature that
 * may vanish, no cancellation where M is small.
 */
function rowSpaceSystem(shard: Shard, metric: Float64Array, center: Float64Array): NewtonSystem {
  const { rowCount, p, x, offset } = shard;
  const kernel = rowKernel(shard, metric);
  const atCenter = new Float64Array(rowCount);
  rowProducts(x, p, 0, rowCount, center, atCenter);
  const bent = new Float64Array(rowCount);
  let roots: Float64Array = new Float64Array(rowCount);
  let factor: Float64Array = new Float64Array(0);
  return {
    passesPerRefresh: (rowCount * rowCount) / (6 * p),
    refresh(curvatures) {
      roots = curvatures.map(Math.sqrt);
      const made = rowFactor(kernel, roots);
      if (made !== null) factor = made;
      return made !== null;
    },
    step({ x: at, rows }) {
      rowProducts(kernel, rowCount, 0, rowCount, rows.slopes, bent);
      for (let r = 0; r < rowCount; r++) {
        const eta = rows.eta[r] - (offset === null ? 0 : offset[r]);
        bent[r] = roots[r] * (eta - atCenter[r] + bent[r]);
      }
      const alpha = choleskySolve(factor, rowCount, bent);
      for (let r = 0; r < rowCount; r++) alpha[r] = roots[r] * alpha[r] - rows.slopes[r];
      const pulled = new Float64Array(p);
      addWeightedRows(x, p, 0, rowCount, alpha, pulled);
      const target = pointFromRows(shard, metric, center, pulled);
      for (let j = 0; j < p; j++) target[j] -= at[j];
      return target;
    },
  };
}
