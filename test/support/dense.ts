import { DenseRows, RawDenseRows } from '../../worker/design/dense-rows.js';
import type { RawShard, Shard } from '../../worker/design/shard.js';

/** The entries of a shard whose rows are in memory, row-major. */
export function entriesOf({ rows }: Pick<Shard, 'rows'> | Pick<RawShard, 'rows'>): Float64Array {
  if (rows instanceof DenseRows || rows instanceof RawDenseRows) return rows.x;
  throw new Error('rows that are not in memory as a whole');
}
