import type { FactorAccumulator } from '../triangular-factor.js';

/** What can do the arithmetic over rows. */
export const KERNEL_NAMES = ['plain', 'simd', 'relaxed'] as const;
export type KernelName = (typeof KERNEL_NAMES)[number];

/** A loss by linear predictor, row by row; the kernels know `squared`, `logistic`, `poisson` and `huber` by name. */
export interface RowLoss {
  readonly name: string;
  /** Of Huber's loss, in units of the response; 0 for the others. */
  readonly threshold: number;
  value(y: number, eta: number): number;
  slope(y: number, eta: number): number;
  curvature(y: number, eta: number): number;
}

/** Rows with their responses; x is row-major, rowCount × p. Null: every weight is 1, every offset 0. */
export interface LossRows {
  readonly rowCount: number;
  readonly p: number;
  readonly x: Float64Array;
  readonly y: Float64Array;
  readonly weights: Float64Array | null;
  readonly offset: Float64Array | null;
  /** N: sums over rows are divided by it. */
  readonly rowCountTotal: number;
}

/** Per-row results of a pass, rowCount numbers each. */
export interface RowState {
  /** offset + x_r θ. */
  readonly eta: Float64Array;
  /** (w/N) · ∂loss/∂η. */
  readonly slopes: Float64Array;
}

/** One point of a pass and where its results go; without `gradient` the slopes are left as they are. */
export interface PassPoint {
  readonly theta: Float64Array;
  /** Null where the rows' own results are not wanted. */
  readonly state: RowState | null;
  /** Overwritten with ∇φ(θ) = Σ slope_r x_r. */
  readonly gradient: Float64Array | null;
}

/** φ(θ), and (1/N) Σ |w · loss|: the size of the terms that rounding errors of φ are measured against. */
export interface PassValue {
  readonly value: number;
  readonly magnitude: number;
}

/** A matrix A = L Lᵀ, factored. */
export interface CholeskyFactor {
  /** A⁻¹ b. */
  solve(b: Float64Array): Float64Array;
}

/**
 * The arithmetic over the rows of one shard. Any array may be given; those that `numbers` made may lie in a memory of the
 * kernel's own and are not copied. The same variant gives the same bits for the same content; variants differ in the
 * last digits. Functions of the same names in `numerics` say what each computes.
 */
export interface Kernel {
  readonly name: KernelName;
  /** Zeros, in the kernel's memory while there is room. */
  numbers(count: number): Float64Array;
  rowProducts(
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    theta: Float64Array,
    out: Float64Array,
  ): void;
  addWeightedRows(
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    weights: Float64Array,
    out: Float64Array,
  ): void;
  addWeightedSquares(
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    weights: Float64Array,
    out: Float64Array,
  ): void;
  weightedGram(
    x: Float64Array,
    rowCount: number,
    p: number,
    weights: Float64Array | null,
    factor: number,
  ): Float64Array;
  /** One read of the rows for all points: φ, predictors, slopes and gradients. */
  passes(rows: LossRows, loss: RowLoss, points: readonly PassPoint[]): PassValue[];
  /** (w/N) · ∂²loss/∂η² of every row at the predictors given. */
  curvatures(rows: Omit<LossRows, 'x' | 'p'>, loss: RowLoss, eta: Float64Array): Float64Array;
  /** Null where A (row-major, p × p) is not positive definite to working precision. */
  factorise(a: Float64Array, p: number): CholeskyFactor | null;
  factorAccumulator(columns: number): FactorAccumulator;
}

/** How much a kernel is opened for. */
export interface KernelRoom {
  /** Most columns of any matrix. */
  readonly columns: number;
  /** Numbers that `numbers` will be asked for in all, each call rounded up to a multiple of 8. */
  readonly numbers: number;
}

export interface KernelVariant {
  readonly name: KernelName;
  /** Threads that work on the rows; absent: one. */
  readonly threads?: number;
  open(room: KernelRoom): Kernel;
}
