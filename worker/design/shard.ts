/**
 * What the local solvers work on: the shard's rows as solver columns. Pure data, no names.
 *
 * x is row-major, rowCount × p; column 0 is the intercept (ones) where the model has one; the others are
 * (design column − center) / scale. φ(θ) = (1/N) Σ w · loss(y, offset + xθ) with N = rowCountTotal.
 */
export interface Shard {
  readonly rowCount: number;
  readonly p: number;
  readonly x: Float64Array;
  readonly y: Float64Array;
  /** Null: every weight is 1, every offset 0. */
  readonly weights: Float64Array | null;
  readonly offset: Float64Array | null;
  /** N, over all sites. */
  readonly rowCountTotal: number;
}

/** The shard before the pooled scaling is known: design columns as the specification defines them, row-major, no intercept. */
export interface RawShard {
  readonly rowCount: number;
  readonly rowsDropped: number;
  readonly columns: readonly string[];
  readonly x: Float64Array;
  readonly y: Float64Array;
  readonly weights: Float64Array | null;
  readonly offset: Float64Array | null;
}
