import type { KernelVariant } from '../../numerics/kernels/kernel.js';
import { seededRandom } from '../../numerics/random.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import type { Entries } from '../../worker/design/entries.js';
import { RawSparseRows } from '../../worker/design/raw-sparse-rows.js';
import type { DesignRows, RawRows } from '../../worker/design/rows.js';
import { lossOf } from '../../worker/losses/index.js';

export interface SparseTime {
  readonly name: string;
  readonly p: number;
  /** Entries of a row. */
  readonly entries: number;
  /** Time of rows by their entries over that of the same rows in full. */
  readonly ratio: number;
  /** Of the rows by their entries. */
  readonly nanosecondsPerEntry: number;
}

/** Numbers of the design in full, so that no cache holds it. */
const NUMBERS = 4e6;
const SHAPES = [
  [100, 5],
  [100, 20],
  [200, 10],
  [200, 20],
  [400, 20],
  [400, 80],
  [1000, 30],
  [1000, 100],
] as const;

/** A logistic loss with its gradient, and the weighted Gram matrix: by entries against in full, in alternation, the quickest of `repeats`. */
export function sparseTimes(
  variant: KernelVariant,
  { numbers = NUMBERS, repeats }: { readonly numbers?: number; readonly repeats: number },
  nowMs: () => number,
): SparseTime[] {
  return SHAPES.flatMap(([p, entries]) => {
    const rowCount = Math.ceil(numbers / p);
    const { sparse, dense } = twins(rowCount, p, entries, variant);
    const y = Float64Array.from({ length: rowCount }, (_, row) => row % 2);
    const data = { y, weights: null, offset: null, rowCountTotal: rowCount };
    const loss = lossOf({ kind: 'logistic' });
    const theta = new Float64Array(p).fill(0.01);
    const weights = new Float64Array(rowCount).fill(0.2);
    const pass = (rows: DesignRows) => () =>
      rows.passes(data, loss, [{ theta, state: null, gradient: new Float64Array(p) }]);
    const gram = (rows: DesignRows) => () => rows.gram(weights, 1);
    const works = [['loss and gradient', pass] as const, ['weighted Gram', gram] as const];
    return works.map(([what, of]) => {
      const [own, full] = quickest([of(sparse), of(dense)], repeats, nowMs);
      const nanosecondsPerEntry = (1e6 * own) / (rowCount * entries);
      return {
        name: `${what}, p = ${p}, ${entries} entries a row`,
        p,
        entries,
        ratio: own / full,
        nanosecondsPerEntry,
      };
    });
  });
}

function quickest(works: readonly (() => unknown)[], repeats: number, nowMs: () => number): number[] {
  const least = works.map(() => Number.POSITIVE_INFINITY);
  for (let repeat = 0; repeat < repeats; repeat++)
    works.forEach((work, k) => {
      const from = nowMs();
      work();
      least[k] = Math.min(least[k], nowMs() - from);
    });
  return least;
}

function twins(
  rowCount: number,
  p: number,
  each: number,
  variant: KernelVariant,
): { sparse: DesignRows; dense: DesignRows } {
  const random = seededRandom(p);
  const starts = Int32Array.from({ length: rowCount + 1 }, (_, row) => row * each);
  // one entry in every stretch of p / each columns, as terms of levels have them
  const columns = Int32Array.from(
    { length: rowCount * each },
    (_, e) => Math.floor(((e % each) * p) / each) + random.integer(Math.floor(p / each)),
  );
  const entries: Entries = { rowCount, starts, columns, values: new Float64Array(rowCount * each).fill(1) };
  const sparse = new RawSparseRows(entries, p);
  const x = new Float64Array(rowCount * p);
  sparse.copy(0, rowCount, x);
  const scaling: Scaling = {
    rowCountTotal: rowCount,
    kept: Array.from({ length: p }, (_, j) => j),
    center: new Float64Array(p).fill(each / p),
    scale: new Float64Array(p).fill(Math.sqrt(each / p)),
  };
  const made = (raw: RawRows): DesignRows => raw.scaled(scaling, false, rowCount, variant);
  return { sparse: made(sparse), dense: made(new RawDenseRows(x, p, rowCount)) };
}
