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
  /** 1-based; absent where row i is the source's row i + 1. */
  readonly rowNumbers: Uint32Array | null;
  /** Float64Array for numeric columns, Int32Array of codes for level columns. */
  readonly values: readonly (Float64Array | Int32Array)[];
}

/**
 * One pass over a relation in its order, chunk by chunk: memory holds the used columns of the rows used and one chunk.
 */
export async function scanRelation(
  engine: Engine,
  relation: Relation,
  columns: readonly ScanColumn[],
  options: ScanOptions,
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
    const finding = pass.take(chunk);
    if (finding !== null) return succeed(finding);
  }
}

class Pass {
  private rowsSeen = 0;
  private rowsDropped = 0;
  private rowCount = 0;
  private readonly kept: GrowingColumn<Float64Array | Int32Array>[];
  private readonly rowNumbers = new GrowingColumn<Uint32Array>((length) => new Uint32Array(length));
  private readonly numberRows: boolean;

  constructor(
    private readonly columns: readonly ScanColumn[],
    private readonly options: ScanOptions,
  ) {
    this.numberRows = options.missing === 'drop' || options.shard.of > 1;
    this.kept = columns.map((column) =>
      column.kind === 'numeric'
        ? new GrowingColumn((length) => new Float64Array(length))
        : new GrowingColumn((length) => new Int32Array(length)),
    );
  }

  take(chunk: DuckDBDataChunk): Finding | null {
    const length = chunk.rowCount;
    const values = this.columns.map((_, column) => doublesOf(chunk, column, length));
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
    const used = rows.subarray(0, rowsKept);
    this.kept.forEach((column, j) => {
      column.append(values[j], used);
    });
    if (this.numberRows) {
      this.rowNumbers.append(
        Float64Array.from({ length }, (_, i) => this.rowsSeen + i + 1),
        used,
      );
    }
    this.rowCount += rowsKept;
    this.rowsSeen += length;
    return null;
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
    const wholeTable = this.rowCount === this.rowsSeen;
    return {
      found: null,
      rowsSeen: this.rowsSeen,
      rowCount: this.rowCount,
      rowsDropped: this.rowsDropped,
      rowNumbers: wholeTable ? null : this.rowNumbers.finish(),
      values: this.kept.map((column) => column.finish()),
    };
  }
}

const usable = { found: null, column: -1 } as const;

function doublesOf(chunk: DuckDBDataChunk, column: number, length: number): Float64Array {
  const vector = chunk.getColumnVector(column);
  const values = new Float64Array(length);
  for (let i = 0; i < length; i++) values[i] = vector.getItem(i) as number;
  return values;
}

/** A column of unknown length, in blocks, so that growing copies nothing. */
class GrowingColumn<T extends Float64Array | Int32Array | Uint32Array> {
  private readonly full: T[] = [];
  private block: T;
  private filled = 0;

  constructor(private readonly allocate: (length: number) => T) {
    this.block = allocate(BLOCK_ROWS);
  }

  append(values: Float64Array, rows: Int32Array): void {
    for (let i = 0; i < rows.length; i++) {
      if (this.filled === BLOCK_ROWS) {
        this.full.push(this.block);
        this.block = this.allocate(BLOCK_ROWS);
        this.filled = 0;
      }
      this.block[this.filled++] = values[rows[i]];
    }
  }

  /** One array; the blocks are let go. */
  finish(): T {
    const whole = this.allocate(this.full.length * BLOCK_ROWS + this.filled);
    this.full.forEach((block, i) => {
      whole.set(block, i * BLOCK_ROWS);
    });
    whole.set(this.block.subarray(0, this.filled), this.full.length * BLOCK_ROWS);
    this.full.length = 0;
    this.block = this.allocate(0);
    return whole;
  }
}

const BLOCK_ROWS = 16_384;
