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
  const ring = scaledRows(raw, scaling, intercept, rows, variant);
  const { p, kernel } = ring;
  const stretch = (from: number, to: number): Shard => ({
    rowCount: to - from,
    p,
    x: ring.x.subarray(from * p, to * p),
    y: ring.y.subarray(from, to),
    weights: ring.weights?.subarray(from, to) ?? null,
    offset: ring.offset?.subarray(from, to) ?? null,
    rowCountTotal: scaling.rowCountTotal,
    kernel,
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
export function aboutSiteMeans({ x, columns, weights, rowCount }: RawShard, scaling: Scaling): Scaling {
  const width = columns.length;
  const sums = new Float64Array(scaling.kept.length);
  let total = 0;
  for (let row = 0; row < rowCount; row++) {
    const weight = weights?.[row] ?? 1;
    total += weight;
    for (let j = 0; j < sums.length; j++) sums[j] += weight * x[row * width + scaling.kept[j]];
  }
  return { ...scaling, center: total > 0 ? sums.map((sum) => sum / total) : scaling.center };
}

function scaledRows(
  raw: RawShard,
  scaling: Scaling,
  intercept: boolean,
  rows: number,
  variant: KernelVariant,
): Shard {
  const { kept, center, scale } = scaling;
  const lead = intercept ? 1 : 0;
  const p = lead + kept.length;
  const width = raw.columns.length;
  const kernel = variant.open({ columns: p, numbers: wholeLines(rows * p) + 3 * wholeLines(rows) });
  const x = kernel.numbers(rows * p);
  for (let row = 0; row < raw.rowCount; row++) {
    const from = row * width;
    const to = row * p;
    if (intercept) x[to] = 1;
    for (let j = 0; j < kept.length; j++) x[to + lead + j] = (raw.x[from + kept[j]] - center[j]) / scale[j];
  }
  x.copyWithin(raw.rowCount * p, 0, (rows - raw.rowCount) * p);
  return {
    rowCount: rows,
    p,
    x,
    y: ringOf(raw.y, rows, kernel),
    weights: raw.weights === null ? null : ringOf(raw.weights, rows, kernel),
    offset: raw.offset === null ? null : ringOf(raw.offset, rows, kernel),
    rowCountTotal: scaling.rowCountTotal,
    kernel,
  };
}

/** Numbers as `Kernel.numbers` takes them up. */
const wholeLines = (count: number): number => 8 * Math.ceil(count / 8);

function ringOf(values: Float64Array, rows: number, kernel: Kernel): Float64Array {
  const out = kernel.numbers(rows);
  out.set(values);
  out.copyWithin(values.length, 0, rows - values.length);
  return out;
}
