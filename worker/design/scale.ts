import type { Kernel, KernelVariant } from '../../numerics/kernels/kernel.js';
import { plainVariant } from '../../numerics/kernels/plain.js';
import type { Part } from '../../protocol/messages/part.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { RawShard, Shard } from './shard.js';

/**
 * Design columns to solver columns: ones for the intercept where the model has one, then (x − center) / scale of each
 * column kept. `scaling.kept`, `center` and `scale` run in parallel.
 */
export const scaleShard = (raw: RawShard, scaling: Scaling, intercept: boolean): Shard =>
  scaleParts(raw, scaling, intercept)(null);

/**
 * The solver columns of every part of the shard. Rows stand fold after fold and, but for the last fold, a second time
 * after it: so the rows in a fold and those outside it are each one stretch of the same memory, and no part is copied.
 * Outside a fold that has no row here are all rows. They lie in the memory of a kernel opened for them.
 */
export function scaleParts(
  raw: RawShard,
  scaling: Scaling,
  intercept: boolean,
  variant: KernelVariant = plainVariant,
): (part: Part) => Shard {
  const { rowCount, folds } = raw;
  const rows = folds === null ? rowCount : rowCount + folds.starts[folds.labels.length - 1];
  const ring = raw.rows.scaled(scaling, intercept, rows, variant);
  const { p, kernel } = ring;
  const y = ringOf(raw.y, rows, kernel);
  const weights = raw.weights === null ? null : ringOf(raw.weights, rows, kernel);
  const offset = raw.offset === null ? null : ringOf(raw.offset, rows, kernel);
  const stretch = (from: number, to: number): Shard => ({
    rowCount: to - from,
    p,
    rows: ring.stretch(from, to),
    y: y.subarray(from, to),
    weights: weights?.subarray(from, to) ?? null,
    offset: offset?.subarray(from, to) ?? null,
    rowCountTotal: scaling.rowCountTotal,
  });
  return (part) => {
    const k = part === null ? -1 : (folds?.labels.indexOf(part.fold) ?? -1);
    if (folds === null || part === null || k < 0)
      return part?.side === 'held-out' ? stretch(0, 0) : stretch(0, rowCount);
    const [from, to] = [folds.starts[k], folds.starts[k + 1]];
    return part.side === 'held-out' ? stretch(from, to) : stretch(to, from + rowCount);
  };
}

/** The same scaling about the site's own means: an intercept of its own takes up any shift, and sums lose no digits. */
export function aboutSiteMeans({ rows, weights, rowCount }: RawShard, scaling: Scaling): Scaling {
  const sums = rows.weightedSum(weights);
  const total = weights === null ? rowCount : weights.reduce((sum, weight) => sum + weight, 0);
  const center = Float64Array.from(scaling.kept, (column) => sums[column] / total);
  return total > 0 ? { ...scaling, center } : scaling;
}

function ringOf(values: Float64Array, rows: number, kernel: Kernel): Float64Array {
  const out = kernel.numbers(rows);
  out.set(values);
  out.copyWithin(values.length, 0, rows - values.length);
  return out;
}
