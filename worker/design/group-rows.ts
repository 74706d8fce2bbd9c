import type { LevelColumn } from '../source/table.js';
import type { Labelled } from './folds.js';
import type { RawRows } from './rows.js';
import type { FoldRanges, RawShard } from './shard.js';

/**
 * The shard with its rows fold after fold, each fold in table order, so that the rows in a fold, and those outside it in
 * a ring, stand side by side. The design is reordered in place; `grouped` is a design in that order already.
 */
export function groupedByFold(
  raw: RawShard,
  { labels, ofRow }: Labelled,
  grouped: RawRows | null = null,
): RawShard {
  const starts = startsOf(labels.length, ofRow);
  const order = orderOf(starts, ofRow);
  const { y, weights, offset, clusters, margins } = raw;
  const folds: FoldRanges = { labels, starts };
  return {
    ...raw,
    rows: grouped ?? raw.rows.reordered(order),
    y: gathered(y, order),
    weights: weights === null ? null : gathered(weights, order),
    offset: offset === null ? null : gathered(offset, order),
    folds,
    clusters: clusters === null ? null : { ...clusters, ofRow: gatheredCodes(clusters.ofRow, order) },
    margins:
      margins === null
        ? null
        : {
            ...margins,
            numeric: mapped(margins.numeric, (values) => gathered(values, order)),
            levels: mapped(
              margins.levels,
              ({ levels, codes }): LevelColumn => ({ levels, codes: gatheredCodes(codes, order) }),
            ),
          },
  };
}

function startsOf(folds: number, ofRow: Int32Array): number[] {
  const starts = new Array<number>(folds + 1).fill(0);
  for (const fold of ofRow) starts[fold + 1]++;
  for (let k = 0; k < folds; k++) starts[k + 1] += starts[k];
  return starts;
}

/** order[to] is the row that comes to stand at `to`. */
function orderOf(starts: readonly number[], ofRow: Int32Array): Int32Array {
  const next = [...starts];
  const order = new Int32Array(ofRow.length);
  for (let row = 0; row < ofRow.length; row++) order[next[ofRow[row]]++] = row;
  return order;
}

function gathered(values: Float64Array, order: Int32Array): Float64Array {
  const out = new Float64Array(order.length);
  for (let to = 0; to < order.length; to++) out[to] = values[order[to]];
  return out;
}

function gatheredCodes(codes: Int32Array, order: Int32Array): Int32Array {
  const out = new Int32Array(order.length);
  for (let to = 0; to < order.length; to++) out[to] = codes[order[to]];
  return out;
}

const mapped = <A, B>(map: ReadonlyMap<string, A>, of: (value: A) => B): Map<string, B> =>
  new Map([...map].map(([key, value]) => [key, of(value)]));
