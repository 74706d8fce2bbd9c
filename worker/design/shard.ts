import type { DesignColumn } from '../../protocol/specification/types.js';
import type { LevelColumn } from '../source/table.js';
import type { DesignRows, RawRows, RowData } from './rows.js';

/**
 * What the local solvers work on: the shard's rows as solver columns. Pure data, no names.
 *
 * Column 0 is the intercept (ones) where the model has one; the others are (design column − center) / scale.
 * φ(θ) = (1/N) Σ w · loss(y, offset + xθ) with N = rowCountTotal.
 */
export interface Shard extends RowData {
  readonly rowCount: number;
  readonly p: number;
  readonly rows: DesignRows;
}

/** The shard before the pooled scaling is known. */
export interface RawShard {
  readonly rowCount: number;
  readonly rowsDropped: number;
  /** Names of the design columns. */
  readonly columns: readonly string[];
  readonly rows: RawRows;
  readonly y: Float64Array;
  readonly weights: Float64Array | null;
  readonly offset: Float64Array | null;
  /** Null without a cross-validation. Rows stand fold after fold, in table order within one. */
  readonly folds: FoldRanges | null;
  /** Null where no clusters are named. */
  readonly clusters: Clusters | null;
  /** Null where the report of the specification has no margins: then the table's columns are let go. */
  readonly margins: MarginColumns | null;
}

/** Fold `labels[k]` has the rows `starts[k]` ≤ r < `starts[k + 1]`. */
export interface FoldRanges {
  /** Those with rows here, by code unit. */
  readonly labels: readonly string[];
  readonly starts: readonly number[];
}

/** Clusters are numbered from 0; every one has rows here. */
export interface Clusters {
  readonly count: number;
  readonly ofRow: Int32Array;
}

/** What the design was made of, row by row as in the shard. */
export interface MarginColumns {
  readonly columns: readonly DesignColumn[];
  readonly numeric: ReadonlyMap<string, Float64Array>;
  readonly levels: ReadonlyMap<string, LevelColumn>;
}
