import type { Kernel, KernelVariant, PassPoint, PassValue, RowLoss } from '../../numerics/kernels/kernel.js';
import { plainKernel } from '../../numerics/kernels/plain.js';
import { transposed } from '../../numerics/rows.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { momentsOf } from './moments.js';
import type { DesignRows, Moments, RawRows, RowData } from './rows.js';
import type { Shard } from './shard.js';

/** Rows in memory, row-major, rowCount × p. */
export class DenseRows implements DesignRows {
  readonly sparse = false;

  constructor(
    readonly x: Float64Array,
    readonly p: number,
    readonly kernel: Kernel,
    readonly rowCount: number,
  ) {}

  products(from: number, to: number, theta: Float64Array, out: Float64Array): void {
    this.kernel.rowProducts(this.x, this.p, from, to, theta, out);
  }

  addWeighted(from: number, to: number, weights: Float64Array, out: Float64Array): void {
    this.kernel.addWeightedRows(this.x, this.p, from, to, weights, out);
  }

  addWeightedSquares(from: number, to: number, weights: Float64Array, out: Float64Array): void {
    this.kernel.addWeightedSquares(this.x, this.p, from, to, weights, out);
  }

  gram(weights: Float64Array | null, factor: number): Float64Array {
    return this.kernel.weightedGram(this.x, this.rowCount, this.p, weights, factor);
  }

  crossProducts(inverse: Float64Array): Float64Array {
    const { x, rowCount, p, kernel } = this;
    return kernel.weightedGram(transposed(x, rowCount, p), p, rowCount, inverse, 1);
  }

  passes(data: RowData, loss: RowLoss, points: readonly PassPoint[]): PassValue[] {
    const { x, rowCount, p } = this;
    const { y, weights, offset, rowCountTotal } = data;
    return this.kernel.passes({ x, rowCount, p, y, weights, offset, rowCountTotal }, loss, points);
  }

  copy(from: number, to: number, out: Float64Array): void {
    out.set(this.x.subarray(from * this.p, to * this.p));
  }

  stretch(from: number, to: number): DenseRows {
    const { p } = this;
    return new DenseRows(this.x.subarray(from * p, to * p), p, this.kernel, to - from);
  }

  columns(kept: readonly number[]): DenseRows {
    const { x, rowCount, p } = this;
    const out = new Float64Array(rowCount * kept.length);
    for (let r = 0, at = 0; r < rowCount; r++) for (const j of kept) out[at++] = x[r * p + j];
    return new DenseRows(out, kept.length, this.kernel, rowCount);
  }
}

/** A shard of rows in memory; `x` is row-major, rowCount × p. */
export function denseShard(given: {
  readonly rowCount: number;
  readonly p: number;
  readonly x: Float64Array;
  readonly y: Float64Array;
  readonly weights: Float64Array | null;
  readonly offset: Float64Array | null;
  readonly rowCountTotal: number;
  readonly kernel?: Kernel;
}): Shard {
  const { rowCount, p, x, y, weights, offset, rowCountTotal, kernel = plainKernel } = given;
  return { rowCount, p, rows: new DenseRows(x, p, kernel, rowCount), y, weights, offset, rowCountTotal };
}

/** Design columns in memory, row-major, rowCount × p. */
export class RawDenseRows implements RawRows {
  constructor(
    readonly x: Float64Array,
    readonly p: number,
    readonly rowCount: number,
  ) {}

  moments(from: number, to: number): Moments {
    const { x, p } = this;
    return momentsOf(p, to - from, (look) => look(x.subarray(from * p, to * p)));
  }

  weightedSum(weights: Float64Array | null): Float64Array {
    const { x, p, rowCount } = this;
    const sums = new Float64Array(p);
    for (let row = 0; row < rowCount; row++) {
      const weight = weights?.[row] ?? 1;
      for (let j = 0; j < p; j++) sums[j] += weight * x[row * p + j];
    }
    return sums;
  }

  scaled(
    { kept, center, scale }: Scaling,
    intercept: boolean,
    ringRows: number,
    variant: KernelVariant,
  ): DenseRows {
    const lead = intercept ? 1 : 0;
    const p = lead + kept.length;
    const kernel = variant.open({ columns: p, numbers: wholeLines(ringRows * p) + 3 * wholeLines(ringRows) });
    const x = kernel.numbers(ringRows * p);
    for (let row = 0; row < this.rowCount; row++) {
      const from = row * this.p;
      const to = row * p;
      if (intercept) x[to] = 1;
      for (let j = 0; j < kept.length; j++)
        x[to + lead + j] = (this.x[from + kept[j]] - center[j]) / scale[j];
    }
    x.copyWithin(this.rowCount * p, 0, (ringRows - this.rowCount) * p);
    return new DenseRows(x, p, kernel, ringRows);
  }

  copy(from: number, to: number, out: Float64Array): void {
    out.set(this.x.subarray(from * this.p, to * this.p));
  }

  /** In place: cycle by cycle, with room for one row. */
  reordered(order: Int32Array): RawDenseRows {
    const { x, p } = this;
    const placed = new Uint8Array(order.length);
    const kept = new Float64Array(p);
    for (let first = 0; first < order.length; first++) {
      if (placed[first] === 1) continue;
      kept.set(x.subarray(first * p, (first + 1) * p));
      let to = first;
      while (order[to] !== first) {
        x.copyWithin(to * p, order[to] * p, (order[to] + 1) * p);
        placed[to] = 1;
        to = order[to];
      }
      x.set(kept, to * p);
      placed[to] = 1;
    }
    return this;
  }
}

/** Numbers as `Kernel.numbers` takes them up. */
export const wholeLines = (count: number): number => 8 * Math.ceil(count / 8);
