import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { designColumnCount } from '../../protocol/specification/design-columns.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { buildRawShard } from '../design/build.js';
import type { RawShard } from '../design/shard.js';
import { isSparse } from '../design/sparse-build.js';
import type { RowReader } from '../design/streamed-rows.js';
import type { Table, TableRequest } from '../source/table.js';
import { sizeText } from './size.js';

const KEEP_ON_DISK = 'Say how much memory the rows may take, and keep the rest on disk: join --memory 2GB.';

/** A shard, and what to close once no run uses it. */
export interface BuiltShard {
  readonly raw: RawShard;
  /** Null where the rows are in memory. */
  readonly cache: (RowReader & { close(): void }) | null;
  readonly bytesOnDisk: number;
}

export type ShardBuilder = (spec: FitSpecification, request: TableRequest) => Promise<Checked<BuiltShard>>;

/** Builds shards in memory; fails with `table-unreadable` where the design takes more than `bytesMost`. */
export const shardsInMemory =
  (
    readTable: (request: TableRequest) => Promise<Checked<Table>>,
    bytesMost = Number.POSITIVE_INFINITY,
  ): ShardBuilder =>
  async (spec, request) => {
    const table = await readTable(request);
    if (!table.ok) return table;
    // as it is, and as solver columns
    const bytes = isSparse(spec.terms) ? 0 : 16 * table.value.rowCount * designColumnCount(spec.terms);
    if (bytes > bytesMost)
      return fail(
        'table-unreadable',
        `The rows take ${sizeText(bytes)} of memory: more than this machine has.`,
        {
          remedy: KEEP_ON_DISK,
        },
      );
    const raw = buildRawShard(spec, table.value);
    return raw.ok ? succeed({ raw: raw.value, cache: null, bytesOnDisk: 0 }) : raw;
  };

/**
 * What `work` makes, or `table-unreadable` where the machine does not give the memory for it (a RangeError of an array
 * that cannot be had).
 */
export async function withinMemory<T>(work: () => Promise<Checked<T>> | Checked<T>): Promise<Checked<T>> {
  try {
    return await work();
  } catch (error) {
    if (!(error instanceof RangeError)) throw error;
    return fail('table-unreadable', `The table outgrows the memory of this process: ${error.message}.`, {
      remedy: KEEP_ON_DISK,
    });
  }
}
