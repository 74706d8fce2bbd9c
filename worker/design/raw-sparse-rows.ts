import type { KernelVariant } from '../../numerics/kernels/kernel.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { wholeLines } from './dense-rows.js';
import { type Entries, entryCounts, placedEntries, reorderedEntries } from './entries.js';
import type { Moments, RawRows } from './rows.js';
import { sparseColumns } from './sparse-columns.js';
import { SparseRows } from './sparse-rows.js';

/** Columns of the matrices that the kernel beside sparse rows has room for. */
const KERNEL_COLUMNS_MOST = 4096;

/** Design columns by their entries: memory and work go by the entries, and a few vectors of p numbers. */
export class RawSparseRows implements RawRows {
  readonly rowCount: number;

  constructor(
    readonly entries: Entries,
    readonly p: number,
  ) {
    this.rowCount = entries.rowCount;
  }

  /** As `RawDenseRows.moments`, the rows without an entry of a column taken together. */
  moments(from: number, to: number): Moments {
    const { p } = this;
    const { starts, columns, values } = this.entries;
    const rowCount = to - from;
    const [first, end] = [starts[from], starts[to]];
    const counts = entryCounts(this.entries, p, from, to);
    const mean = new Float64Array(p);
    const least = new Float64Array(p).fill(Number.POSITIVE_INFINITY);
    const most = new Float64Array(p).fill(Number.NEGATIVE_INFINITY);
    for (let e = first; e < end; e++) {
      const j = columns[e];
      mean[j] += values[e];
      if (values[e] < least[j]) least[j] = values[e];
      if (values[e] > most[j]) most[j] = values[e];
    }
    for (let j = 0; j < p; j++) mean[j] /= rowCount;
    const rest = new Float64Array(p);
    const centredSquares = new Float64Array(p);
    for (let e = first; e < end; e++) {
      const away = values[e] - mean[columns[e]];
      rest[columns[e]] += away;
      centredSquares[columns[e]] += away * away;
    }
    const constant = new Array<boolean>(p).fill(false);
    for (let j = 0; j < p; j++) {
      const zeros = rowCount - counts[j];
      if (zeros > 0) {
        least[j] = Math.min(least[j], 0);
        most[j] = Math.max(most[j], 0);
      }
      if (least[j] === most[j]) {
        constant[j] = true;
        mean[j] = least[j];
        centredSquares[j] = 0;
        continue;
      }
      rest[j] -= zeros * mean[j];
      centredSquares[j] += zeros * mean[j] * mean[j];
      centredSquares[j] = Math.max(0, centredSquares[j] - (rest[j] * rest[j]) / rowCount);
      mean[j] += rest[j] / rowCount;
    }
    return { mean, centredSquares, constant };
  }

  weightedSum(weights: Float64Array | null): Float64Array {
    const { starts, columns, values } = this.entries;
    const sums = new Float64Array(this.p);
    for (let row = 0; row < this.rowCount; row++) {
      const weight = weights === null ? 1 : weights[row];
      for (let e = starts[row]; e < starts[row + 1]; e++) sums[columns[e]] += weight * values[e];
    }
    return sums;
  }

  /** A column with an entry in every row is centred entry by entry, the others by their shift: nothing is filled in. */
  scaled(scaling: Scaling, intercept: boolean, ringRows: number, variant: KernelVariant): SparseRows {
    const { kept, scale } = scaling;
    const lead = intercept ? 1 : 0;
    const p = lead + kept.length;
    const counts = entryCounts(this.entries, this.p, 0, this.rowCount);
    const placeOf = new Int32Array(this.p).fill(-1);
    const center = new Float64Array(p);
    const shift = new Float64Array(p);
    const scales = new Float64Array(p).fill(1);
    if (intercept) shift[0] = -1;
    for (let k = 0; k < kept.length; k++) {
      placeOf[kept[k]] = lead + k;
      scales[lead + k] = scale[k];
      if (counts[kept[k]] === this.rowCount) center[lead + k] = scaling.center[k];
      else shift[lead + k] = scaling.center[k] / scale[k];
    }
    const entries = placedEntries(this.entries, placeOf, { center, scale: scales });
    const kernel = variant.open({
      columns: Math.min(p, KERNEL_COLUMNS_MOST),
      numbers: 3 * wholeLines(ringRows),
    });
    return new SparseRows(sparseColumns(entries, shift, lead), 0, ringRows, kernel);
  }

  copy(from: number, to: number, out: Float64Array): void {
    const { p } = this;
    const { starts, columns, values } = this.entries;
    out.fill(0, 0, (to - from) * p);
    for (let row = from; row < to; row++)
      for (let e = starts[row]; e < starts[row + 1]; e++) out[(row - from) * p + columns[e]] = values[e];
  }

  reordered(order: Int32Array): RawSparseRows {
    return new RawSparseRows(reorderedEntries(this.entries, order), this.p);
  }
}
