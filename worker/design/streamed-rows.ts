import type { Kernel, PassPoint, PassValue, RowLoss } from '../../numerics/kernels/kernel.js';
import { addScaled } from '../../numerics/vector.js';
import type { DesignRows, RowData } from './rows.js';

/** Rows that are kept somewhere else, of `width` numbers each. */
export interface RowReader {
  readonly rowCount: number;
  readonly width: number;
  /** Rows from ≤ r < to, row-major, to the start of `out`. Throws `RowsLost`. */
  read(from: number, to: number, out: Float64Array): void;
}

/** Rows that were kept somewhere else are not there any more, or not as they were. */
export class RowsLost extends Error {
  constructor(
    readonly reader: RowReader,
    message: string,
  ) {
    super(message);
  }
}

/** Numbers of a window, and its least rows: matrices made of a window should cost more than adding them up. */
const WINDOW_NUMBERS = 524_288;
/** Windows end where blocks of every kernel end. */
const WINDOW_ROWS_LEAST = 1024;

/** Rows in memory at a time. Depends on the width alone: sums are made window by window. */
export const windowRows = (width: number): number =>
  WINDOW_ROWS_LEAST * Math.max(1, Math.floor(WINDOW_NUMBERS / (WINDOW_ROWS_LEAST * Math.max(width, 1))));

/** What the columns of streamed rows are: (x − center) / scale of the reader's columns `from`, but for the one of ones. */
export interface StreamedColumns {
  /** Place of the ones of an intercept, −1 without them; what stands in the arrays there is not looked at. */
  readonly ones: number;
  readonly from: Int32Array;
  readonly center: Float64Array;
  readonly scale: Float64Array;
}

/** The one window that all views of the same rows share. */
export class Window {
  readonly #raw: Float64Array;
  readonly #block: Float64Array;
  #columns: StreamedColumns | null = null;
  #start = 0;
  #rows = 0;

  /** @param columnsMost of the widest view */
  constructor(
    private readonly reader: RowReader,
    readonly kernel: Kernel,
    /** Rows of the window. */
    readonly rowsMost: number,
    columnsMost: number,
  ) {
    this.#raw = new Float64Array(rowsMost * reader.width);
    this.#block = kernel.numbers(rowsMost * columnsMost);
  }

  /** `rows` rows from `start` on as those columns, until the next call; row r ≥ rowCount is row r − rowCount. */
  load(columns: StreamedColumns, start: number, rows: number): Float64Array {
    if (this.#columns !== columns || this.#start !== start || this.#rows !== rows) {
      this.#columns = null;
      this.#read(start % this.reader.rowCount, rows);
      scaleInto(this.#block, this.#raw, this.reader.width, columns, rows);
      this.#columns = columns;
      this.#start = start;
      this.#rows = rows;
    }
    return this.#block.subarray(0, rows * columns.from.length);
  }

  #read(from: number, rows: number): void {
    const { reader } = this;
    const before = Math.min(rows, reader.rowCount - from);
    reader.read(from, from + before, this.#raw);
    if (before < rows) reader.read(0, rows - before, this.#raw.subarray(before * reader.width));
  }
}

function scaleInto(
  block: Float64Array,
  raw: Float64Array,
  width: number,
  { ones, from, center, scale }: StreamedColumns,
  rows: number,
): void {
  const p = from.length;
  for (let r = 0; r < rows; r++) {
    const at = r * width;
    const to = r * p;
    for (let j = 0; j < p; j++) block[to + j] = (raw[at + from[j]] - center[j]) / scale[j];
  }
  if (ones >= 0) for (let r = 0; r < rows; r++) block[r * p + ones] = 1;
}

/** What is done with rows first ≤ r < last of a window; the first of them is row `row`. */
type Look = (x: Float64Array, first: number, last: number, row: number) => void;

/**
 * Rows that are read window by window for every sum. Sums are those of the rows in memory to rounding; the same rows
 * give the same bits however much memory there is.
 */
export class StreamedRows implements DesignRows {
  readonly sparse = false;
  readonly p: number;

  constructor(
    private readonly window: Window,
    private readonly scaled: StreamedColumns,
    private readonly start: number,
    readonly rowCount: number,
  ) {
    this.p = scaled.from.length;
  }

  get kernel(): Kernel {
    return this.window.kernel;
  }

  #each(from: number, to: number, look: Look): void {
    const step = this.window.rowsMost;
    for (let begin = step * Math.floor(from / step); begin < to; begin += step) {
      const rows = Math.min(step, this.rowCount - begin);
      const x = this.window.load(this.scaled, this.start + begin, rows);
      const first = Math.max(from - begin, 0);
      look(x, first, Math.min(to - begin, rows), begin + first);
    }
  }

  products(from: number, to: number, theta: Float64Array, out: Float64Array): void {
    this.#each(from, to, (x, first, last, row) => {
      this.kernel.rowProducts(x, this.p, first, last, theta, out.subarray(row - from));
    });
  }

  addWeighted(from: number, to: number, weights: Float64Array, out: Float64Array): void {
    this.#each(from, to, (x, first, last, row) => {
      this.kernel.addWeightedRows(x, this.p, first, last, weights.subarray(row - from), out);
    });
  }

  addWeightedSquares(from: number, to: number, weights: Float64Array, out: Float64Array): void {
    this.#each(from, to, (x, first, last, row) => {
      this.kernel.addWeightedSquares(x, this.p, first, last, weights.subarray(row - from), out);
    });
  }

  gram(weights: Float64Array | null, factor: number): Float64Array {
    const { p, rowCount, kernel } = this;
    let sum: Float64Array | null = null;
    this.#each(0, rowCount, (x, _, rows, row) => {
      const part = kernel.weightedGram(x, rows, p, weights?.subarray(row, row + rows) ?? null, factor);
      if (sum === null) sum = part;
      else addScaled(sum, 1, part);
    });
    return sum ?? new Float64Array(p * p);
  }

  /** By panels of columns, each as large as a window: one read of the rows for each. */
  crossProducts(inverse: Float64Array): Float64Array {
    const { p, rowCount, kernel } = this;
    const sum = new Float64Array(rowCount * rowCount);
    const width = Math.max(1, Math.min(p, Math.floor((this.window.rowsMost * p) / Math.max(rowCount, 1))));
    const panel = new Float64Array(width * rowCount);
    for (let from = 0; from < p; from += width) {
      const columns = Math.min(width, p - from);
      this.#each(0, rowCount, (x, _, rows, row) => {
        for (let r = 0; r < rows; r++)
          for (let j = 0; j < columns; j++) panel[j * rowCount + row + r] = x[r * p + from + j];
      });
      const weights = inverse.subarray(from, from + columns);
      addScaled(sum, 1, kernel.weightedGram(panel, columns, rowCount, weights, 1));
    }
    return sum;
  }

  passes(data: RowData, loss: RowLoss, points: readonly PassPoint[]): PassValue[] {
    const { p, rowCount, kernel } = this;
    const { rowCountTotal } = data;
    const totals = points.map(({ gradient }) => {
      gradient?.fill(0);
      return { value: 0, magnitude: 0 };
    });
    const parts = points.map(({ gradient }) => (gradient === null ? null : new Float64Array(p)));
    this.#each(0, rowCount, (x, _, rows, row) => {
      const end = row + rows;
      const y = data.y.subarray(row, end);
      const weights = data.weights?.subarray(row, end) ?? null;
      const offset = data.offset?.subarray(row, end) ?? null;
      const here = points.map(({ theta, state }, k) => ({
        theta,
        state:
          state === null
            ? null
            : { eta: state.eta.subarray(row, end), slopes: state.slopes.subarray(row, end) },
        gradient: parts[k],
      }));
      const passed = kernel.passes({ x, rowCount: rows, p, y, weights, offset, rowCountTotal }, loss, here);
      points.forEach(({ gradient }, k) => {
        totals[k].value += passed[k].value;
        totals[k].magnitude += passed[k].magnitude;
        const part = parts[k];
        if (gradient !== null && part !== null) addScaled(gradient, 1, part);
      });
    });
    return totals;
  }

  copy(from: number, to: number, out: Float64Array): void {
    this.#each(from, to, (x, first, last, row) => {
      out.set(x.subarray(first * this.p, last * this.p), (row - from) * this.p);
    });
  }

  stretch(from: number, to: number): StreamedRows {
    return new StreamedRows(this.window, this.scaled, this.start + from, to - from);
  }

  columns(kept: readonly number[]): StreamedRows {
    const { ones, from, center, scale } = this.scaled;
    const scaled: StreamedColumns = {
      ones: kept.indexOf(ones),
      from: Int32Array.from(kept, (column) => from[column]),
      center: Float64Array.from(kept, (column) => center[column]),
      scale: Float64Array.from(kept, (column) => scale[column]),
    };
    return new StreamedRows(this.window, scaled, this.start, this.rowCount);
  }
}
