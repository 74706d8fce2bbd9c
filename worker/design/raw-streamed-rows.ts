import type { KernelVariant } from '../../numerics/kernels/kernel.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { wholeLines } from './dense-rows.js';
import { momentsOf } from './moments.js';
import type { Moments, RawRows } from './rows.js';
import { type RowReader, type StreamedColumns, StreamedRows, Window, windowRows } from './streamed-rows.js';

/** Design columns that are read in windows for every sum. */
export class RawStreamedRows implements RawRows {
  readonly rowCount: number;
  readonly p: number;

  /** @param windowMost rows in memory at a time */
  constructor(
    private readonly reader: RowReader,
    private readonly windowMost = windowRows(reader.width),
  ) {
    this.rowCount = reader.rowCount;
    this.p = reader.width;
  }

  moments(from: number, to: number): Moments {
    return momentsOf(this.p, to - from, (look) => this.#each(from, to, look));
  }

  weightedSum(weights: Float64Array | null): Float64Array {
    const { p } = this;
    const sums = new Float64Array(p);
    this.#each(0, this.rowCount, (x, first) => {
      for (let at = 0, row = first; at < x.length; at += p, row++) {
        const weight = weights === null ? 1 : weights[row];
        for (let j = 0; j < p; j++) sums[j] += weight * x[at + j];
      }
    });
    return sums;
  }

  scaled(
    { kept, center, scale }: Scaling,
    intercept: boolean,
    ringRows: number,
    variant: KernelVariant,
  ): StreamedRows {
    const lead = intercept ? [0] : [];
    const columns: StreamedColumns = {
      ones: intercept ? 0 : -1,
      from: Int32Array.from([...lead, ...kept]),
      center: Float64Array.from([...lead, ...center]),
      scale: Float64Array.from([...lead, ...scale]),
    };
    const p = columns.from.length;
    const rows = Math.min(this.windowMost, Math.max(ringRows, 1));
    const numbers = wholeLines(rows * p) + 3 * wholeLines(ringRows);
    const kernel = variant.open({ columns: p, numbers });
    return new StreamedRows(new Window(this.reader, kernel, rows, p), columns, 0, ringRows);
  }

  copy(from: number, to: number, out: Float64Array): void {
    this.reader.read(from, to, out);
  }

  /** Row by row from where they lie: for few rows. What makes many writes them in their order. */
  reordered(order: Int32Array): RawStreamedRows {
    const { reader, p, rowCount } = this;
    return new RawStreamedRows({
      rowCount,
      width: p,
      read: (from, to, out) => {
        for (let r = from; r < to; r++) reader.read(order[r], order[r] + 1, out.subarray((r - from) * p));
      },
    });
  }

  #each(from: number, to: number, look: (x: Float64Array, first: number) => void): void {
    const { p } = this;
    const step = this.windowMost;
    const x = new Float64Array(Math.min(step, to - from) * p);
    for (let begin = from; begin < to; begin += step) {
      const end = Math.min(begin + step, to);
      this.reader.read(begin, end, x);
      look(x.subarray(0, (end - begin) * p), begin);
    }
  }
}

/** Bytes of the windows that streamed rows of so many design columns are read into. */
export const windowBytes = (width: number): number => 8 * windowRows(width) * (3 * width + 1);
