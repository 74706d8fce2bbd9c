import type { Kernel, KernelVariant, PassPoint, PassValue, RowLoss } from '../../numerics/kernels/kernel.js';
import type { Scaling } from '../../protocol/messages/run.js';

/** What stands beside the columns of each row. Null: every weight is 1, every offset 0. */
export interface RowData {
  readonly y: Float64Array;
  readonly weights: Float64Array | null;
  readonly offset: Float64Array | null;
  /** N: sums over rows are divided by it. */
  readonly rowCountTotal: number;
}

/**
 * The rows of a shard as solver columns, and what is summed over them. How they are kept (in memory, as their non-zeros,
 * on disk) is their own affair: whoever computes with rows asks for sums, or for a few rows at a time.
 */
export interface DesignRows {
  readonly rowCount: number;
  readonly p: number;
  /** For the algebra of matrices beside the rows, and for what needs no column. */
  readonly kernel: Kernel;
  /** True where most entries are zeros that are not kept: no p × p matrix should be made of such rows. */
  readonly sparse: boolean;
  /** out[r − from] ← x_r θ, for from ≤ r < to. */
  products(from: number, to: number, theta: Float64Array, out: Float64Array): void;
  /** out += Σ_r weights[r − from] x_r, for from ≤ r < to. */
  addWeighted(from: number, to: number, weights: Float64Array, out: Float64Array): void;
  /** out += Σ_r weights[r − from] x_r ∘ x_r, for from ≤ r < to. */
  addWeightedSquares(from: number, to: number, weights: Float64Array, out: Float64Array): void;
  /** factor · Σ_r weights[r] x_r x_rᵀ over all rows, p × p, row-major; null weighs every row 1. */
  gram(weights: Float64Array | null, factor: number): Float64Array;
  /** X diag(inverse) Xᵀ over all rows, rowCount × rowCount, row-major. */
  crossProducts(inverse: Float64Array): Float64Array;
  /** One read of the rows for all points: φ, predictors, slopes and gradients. */
  passes(data: RowData, loss: RowLoss, points: readonly PassPoint[]): PassValue[];
  /** Rows from ≤ r < to written in full, row-major, to the start of `out`. */
  copy(from: number, to: number, out: Float64Array): void;
  /** The rows from ≤ r < to alone; not copied. */
  stretch(from: number, to: number): DesignRows;
  /** The columns `kept` alone, in that order. */
  columns(kept: readonly number[]): DesignRows;
  /** Absent, or null: too few columns are idle to set them apart. */
  occupied?(): Occupied | null;
}

/** Columns set apart that are the same number in every row, as those of levels that no row has. */
export interface Occupied {
  /** The others, in ascending order. */
  readonly columns: Int32Array;
  /** Idle columns in ascending order, and the number that each is in every row. */
  readonly idle: { readonly columns: Int32Array; readonly values: Float64Array };
  /** Whether any of these numbers is not zero. */
  readonly shifting: boolean;
  /** The others and, where idle columns shift the rows, one more column of ones at their end. */
  readonly rows: DesignRows;
}

/** Unweighted moments of the design columns over a stretch of rows, p numbers each. */
export interface Moments {
  readonly mean: Float64Array;
  /** Σ_r (x_rj − mean_j)². */
  readonly centredSquares: Float64Array;
  /** Columns whose value is the same in every row. */
  readonly constant: readonly boolean[];
}

/** The rows of a shard before the pooled scaling is known: design columns as the specification defines them, no intercept. */
export interface RawRows {
  readonly rowCount: number;
  readonly p: number;
  /** Over from ≤ r < to, at least one row. */
  moments(from: number, to: number): Moments;
  /** Σ_r weights[r] x_r over all rows; null weighs every row 1. */
  weightedSum(weights: Float64Array | null): Float64Array;
  /**
   * Solver columns: ones where there is an intercept, then (x − center) / scale of each column kept. `ringRows` of them,
   * row r ≥ rowCount being row r − rowCount again; opened for three more numbers a row.
   */
  scaled(scaling: Scaling, intercept: boolean, ringRows: number, variant: KernelVariant): DesignRows;
  /** Rows from ≤ r < to written in full, row-major, to the start of `out`. */
  copy(from: number, to: number, out: Float64Array): void;
  /** The same rows in another order: row `order[to]` comes to stand at `to`. These rows are used up. */
  reordered(order: Int32Array): RawRows;
}

/** Rows that are written in full together. */
const COPY_ROWS = 256;

/** Calls `look` for every row in order: it is `p` numbers of `x` from `at` on. */
export function eachRow(rows: DesignRows, look: (x: Float64Array, at: number, row: number) => void): void {
  const x = new Float64Array(Math.min(COPY_ROWS, rows.rowCount) * rows.p);
  for (let from = 0; from < rows.rowCount; from += COPY_ROWS) {
    const to = Math.min(from + COPY_ROWS, rows.rowCount);
    rows.copy(from, to, x);
    for (let row = from; row < to; row++) look(x, (row - from) * rows.p, row);
  }
}
