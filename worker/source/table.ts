/**
 * The columns of a custodian's table that a specification uses, as typed arrays over the rows used, in table order.
 */
export interface Table {
  /** Rows used: rows with a missing value in a used column are left out where the specification says so. */
  readonly rowCount: number;
  readonly rowsDropped: number;
  /** 1-based data row in the source of each row used, for messages. Absent: row i is the source's row i + 1. */
  readonly rowNumbers?: Uint32Array;
  /** Numeric columns by name, every value finite. */
  readonly numeric: ReadonlyMap<string, Float64Array>;
  /** Columns with levels, by column name: `codes[row]` indexes `levels`. */
  readonly levels: ReadonlyMap<string, LevelColumn>;
  /** Columns of labels, by column name: every value there is, in no order that counts. Absent: none were asked for. */
  readonly labels?: ReadonlyMap<string, LevelColumn>;
}

export interface LevelColumn {
  readonly levels: readonly string[];
  readonly codes: Int32Array;
}

/** What to read: every column once, numeric or with its permitted levels. */
export interface TableRequest {
  readonly numeric: readonly string[];
  readonly levels: readonly LevelsRequest[];
  /** Columns whose values only tell rows apart: any text or number, numbers by value. Absent: none. */
  readonly labels?: readonly string[];
  readonly missing: 'refuse' | 'drop';
  /** This worker's share of the rows: row number modulo `of` equals `index − 1`. */
  readonly shard: { readonly index: number; readonly of: number };
}

export interface LevelsRequest {
  readonly column: string;
  /** Permitted levels; a value that is none of them is `level-unknown`. */
  readonly levels: readonly string[];
  /**
   * 'one' for a two-class response of which only the positive class is named: the first other value found joins the
   * levels, a further one is `response-range`.
   */
  readonly others?: 'one';
}

/** Where rows are: the `table` entry of a site file, paths absolute. */
export type TableSource =
  | { readonly kind: 'csv'; readonly path: string }
  | { readonly kind: 'parquet'; readonly path: string }
  | { readonly kind: 'jsonl'; readonly path: string }
  | { readonly kind: 'query'; readonly query: string; readonly folder: string };
