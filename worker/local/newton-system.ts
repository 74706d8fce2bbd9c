import type { CholeskyFactor, RowState } from '../../numerics/kernels/kernel.js';
import { maxOf } from '../../numerics/vector.js';
import type { Shard } from '../design/shard.js';
import { gradientSystem } from './gradient-system.js';
import { inRowSpace, isFactored, pointFromRows, rowFactor, rowKernel } from './row-space.js';

/** Where the next Newton step starts from. */
export interface NewtonPoint {
  readonly x: Float64Array;
  /** Predictors and slopes of the rows at x. */
  readonly rows: RowState;
  /** Gradient of the proximal objective at x. */
  readonly gradient: Float64Array;
  /** Size of the terms of the objective at x. */
  readonly magnitude: number;
}

/** The linear systems of the Newton steps of one proximal problem. */
export interface NewtonSystem {
  /** Takes new row curvatures (w/N · ∂²loss/∂η²); false where the matrix cannot be factored. */
  refresh(curvatures: Float64Array): boolean;
  /** −(XᵀSX + M)⁻¹ gradient with the curvatures S taken last. */
  step(at: NewtonPoint): Float64Array;
  /** False where steps are found without a factor: there is nothing to keep from one step to the next. */
  readonly factored: boolean;
  /** What a refresh costs, in passes over the rows. */
  readonly passesPerRefresh: number;
}

export function newtonSystem(shard: Shard, metric: Float64Array, center: Float64Array): NewtonSystem {
  if (inRowSpace(shard, metric)) return rowSpaceSystem(shard, metric, center);
  return isFactored(shard, metric) ? denseSystem(shard, metric) : gradientSystem(shard, metric);
}

/** Share of the largest diagonal entry added where the matrix does not factor; the direction stays one of descent. */
const LIFT = 1e-12;

function denseSystem(shard: Shard, metric: Float64Array): NewtonSystem {
  const { rowCount, p } = shard;
  const { kernel } = shard.rows;
  let factor: CholeskyFactor | null = null;
  return {
    factored: true,
    passesPerRefresh: p / 4 + (p * p) / (6 * rowCount),
    refresh(curvatures) {
      const a = shard.rows.gram(curvatures, 1);
      const diagonal = new Float64Array(p);
      for (let j = 0; j < p; j++) {
        a[j * p + j] += metric[j];
        diagonal[j] = a[j * p + j];
      }
      let made = kernel.factorise(a, p);
      if (made === null) {
        const lift = LIFT * maxOf(diagonal);
        for (let j = 0; j < p; j++) a[j * p + j] += lift;
        made = kernel.factorise(a, p);
      }
      if (made !== null) factor = made;
      return made !== null;
    },
    step: ({ gradient }) => solved(factor, gradient).map((value) => -value),
  };
}

/**
 * The same step through the rows. With S² the row curvatures, ρ the slopes and δ = X (x − center), the minimiser of the
 * quadratic model is center + M⁻¹Xᵀα with α + S²Kα = S²δ − ρ. Writing α = S b − τ gives the symmetric system
 * (I + SKS) b = S (δ + Kτ) + (τ − ρ) / S for any τ. τ = ρ in rows whose curvature is small (S² K_rr < 1: no division by
 * what may vanish), τ = 0 in the others (no cancellation where slopes are huge).
 */
function rowSpaceSystem(shard: Shard, metric: Float64Array, center: Float64Array): NewtonSystem {
  const { rowCount, p, offset } = shard;
  const { kernel } = shard.rows;
  const products = rowKernel(shard, metric);
  const atCenter = new Float64Array(rowCount);
  shard.rows.products(0, rowCount, center, atCenter);
  const shifted = new Float64Array(rowCount);
  const right = new Float64Array(rowCount);
  let roots: Float64Array = new Float64Array(rowCount);
  let factor: CholeskyFactor | null = null;
  return {
    factored: true,
    passesPerRefresh: (rowCount * rowCount) / (6 * p),
    refresh(curvatures) {
      roots = curvatures.map(Math.sqrt);
      const made = rowFactor(shard, products, roots);
      if (made !== null) factor = made;
      return made !== null;
    },
    step({ x: at, rows }) {
      for (let r = 0; r < rowCount; r++) {
        const steep = roots[r] * roots[r] * products[r * rowCount + r] >= 1;
        shifted[r] = steep ? 0 : rows.slopes[r];
      }
      kernel.rowProducts(products, rowCount, 0, rowCount, shifted, right);
      for (let r = 0; r < rowCount; r++) {
        const moved = rows.eta[r] - (offset === null ? 0 : offset[r]) - atCenter[r];
        const rest = shifted[r] - rows.slopes[r];
        right[r] = roots[r] * (moved + right[r]) + (rest === 0 ? 0 : rest / roots[r]);
      }
      const alpha = solved(factor, right);
      for (let r = 0; r < rowCount; r++) alpha[r] = roots[r] * alpha[r] - shifted[r];
      const pulled = new Float64Array(p);
      shard.rows.addWeighted(0, rowCount, alpha, pulled);
      const target = pointFromRows(shard, metric, center, pulled);
      for (let j = 0; j < p; j++) target[j] -= at[j];
      return target;
    },
  };
}

/** Steps are taken after a refresh that held; one before is a defect. */
function solved(factor: CholeskyFactor | null, b: Float64Array): Float64Array {
  if (factor === null) throw new Error('a step before a factor');
  return factor.solve(b);
}
