import type { DuckDBDataChunk } from '@duckdb/node-api';
import { type Checked, succeed } from '../../protocol/failure.js';
import { MARK } from './column-sql.js';
import { type Engine, streamRows, unreadable } from './duckdb.js';
import type { Relation } from './relation.js';

export interface ScanColumn {
  readonly name: string;
  readonly kind: 'numeric' | 'levels';
  /** A double without nulls: see `MARK`. */
  readonly sql: string;
}

export interface ScanOptions {
  readonly missing: 'refuse' | 'drop';
  readonly shard: { readonly index: number; readonly of: number };
}

/** The first value that cannot be used, by row and then by column. */
export interface Finding {
  readonly found: 'missing' | 'unfit';
  /** 0-based, over the whole source. */
  readonly row: number;
  readonly column: number;
}

export interface Scan {
  readonly found: null;
  /** Rows of the source, all shards. */
  readonly rowsSeen: number;
  readonly rowCount: number;
  readonly rowsDropped: number;
}

/** Some rows of a source, side by side. They last until the next ones are taken. */
export interface ScannedRows {
  /** One array a column, numbers or codes. */
  readonly values: readonly Float64Array[];
  /** Places in those arrays of the rows to use. */
  readonly used: Int32Array;
  /** 1-based number in the source of the row at place 0. */
  readonly firstRow: number;
}

/** Takes the rows to use in their order; a failure ends the pass. */
export type TakeRows = (rows: ScannedRows) => Checked<null>;

/** True where the rows used may be others than the first ones of the source, one after the other. */
export const leavesRowsOut = ({ missing, shard }: ScanOptions): boolean => missing === 'drop' || shard.of > 1;

/** One pass over a relation in its order, chunk by chunk: memory holds one chunk beside what `take` keeps. */
export async function scanRelation(
  engine: Engine,
  relation: Relation,
  columns: readonly ScanColumn[],
  options: ScanOptions,
  take: TakeRows,
): Promise<Checked<Scan | Finding>> {
  const sql = `select ${columns.map((column) => column.sql).join(', ')} from ${relation.from}`;
  const stream = await streamRows(engine, sql, relation.where);
  if (!stream.ok) return stream;
  const pass = new Pass(columns, options);
  for (;;) {
    let chunk: DuckDBDataChunk | null;
    try {
      chunk = await stream.value.fetchChunk();
    } catch (error) {
      return unreadable(error, relation.where);
    }
    if (chunk === null || chunk.rowCount === 0) return succeed(pass.finish());
    const next = pass.next(chunk);
    if ('found' in next) return succeed(next);
    const taken = take(next);
    if (!taken.ok) return taken;
  }
}

class Pass {
  private rowsSeen = 0;
  private rowsDropped = 0;
  private rowCount = 0;
  private values: Float64Array[] = [];

  constructor(
    private readonly columns: readonly ScanColumn[],
    private readonly options: ScanOptions,
  ) {}

  next(chunk: DuckDBDataChunk): ScannedRows | Finding {
    const length = chunk.rowCount;
    const values = this.valuesOf(chunk, length);
    const rows = new Int32Array(length);
    let rowsKept = 0;
    const { index, of } = this.options.shard;
    for (let i = 0; i < length; i++) {
      const row = this.rowsSeen + i;
      if (row % of !== index - 1) continue;
      const state = this.stateOf(values, i);
      if (state.found === 'unfit' || (state.found === 'missing' && this.options.missing === 'refuse'))
        return { found: state.found, row, column: state.column };
      if (state.found === 'missing') this.rowsDropped++;
      else rows[rowsKept++] = i;
    }
    const firstRow = this.rowsSeen + 1;
    this.rowCount += rowsKept;
    this.rowsSeen += length;
    return { values, used: rows.subarray(0, rowsKept), firstRow };
  }

  /** In the same arrays every time: chunks are many. */
  private valuesOf(chunk: DuckDBDataChunk, length: number): Float64Array[] {
    if (this.values.length === 0 || this.values[0].length < length)
      this.values = this.columns.map(() => new Float64Array(length));
    this.values.forEach((values, column) => {
      const vector = chunk.getColumnVector(column);
      for (let i = 0; i < length; i++) values[i] = vector.getItem(i) as number;
    });
    return this.values;
  }

  /** An unfit value goes before a missing one: it is a defect of the table even in a row that is dropped. */
  private stateOf(
    values: readonly Float64Array[],
    i: number,
  ): { found: 'missing' | 'unfit' | null; column: number } {
    let missing = -1;
    for (let j = 0; j < values.length; j++) {
      const value = values[j][i];
      const numeric = this.columns[j].kind === 'numeric';
      if (numeric ? Number.isNaN(value) : value === MARK.levelUnknown) return { found: 'unfit', column: j };
      if (missing < 0 && value === (numeric ? MARK.numericMissing : MARK.levelMissing)) missing = j;
    }
    return missing < 0 ? usable : { found: 'missing', column: missing };
  }

  finish(): Scan {
    return {
      found: null,
      rowsSeen: this.rowsSeen,
      rowCount: this.rowCount,
      rowsDropped: this.rowsDropped,
    };
  }
}

const usable = { found: null, column: -1 } as const;
