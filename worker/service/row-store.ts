import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { buildRawShard } from '../design/build.js';
import { RawDenseRows } from '../design/dense-rows.js';
import { RawStreamedRows, windowBytes } from '../design/raw-streamed-rows.js';
import { type DesignPart, ShardAssembly } from '../design/shard-assembly.js';
import { isSparse } from '../design/sparse-build.js';
import type { Table, TableRequest } from '../source/table.js';
import type { BuiltShard, ShardBuilder } from './built-shard.js';
import { type RowCache, RowCacheWriter } from './row-cache.js';
import { sizeText } from './size.js';

/** Reads a table in parts (`readInParts`). */
export type PartReader = (
  request: TableRequest,
  take: (part: Table) => Checked<null>,
) => Promise<Checked<{ readonly rowCount: number; readonly rowsDropped: number }>>;

export interface StoreMeans {
  /** `--memory`: bytes for rows and what solvers keep for each of them. */
  readonly memoryBytes: number;
  /** Beginning of the path of a file of rows. */
  readonly cachePath: string;
  readonly readInParts: PartReader;
  /** A whole table, failing where its columns take more bytes than those. */
  readonly readTable: (request: TableRequest, bytesMost: number) => Promise<Checked<Table>>;
}

/**
 * Builds shards whose design stays in memory while it fits the limit and is kept on disk where it does not. A design of
 * mostly zeros is kept by its entries, in memory.
 */
export function boundedShards(means: StoreMeans): ShardBuilder {
  return async (spec, request) => {
    if (isSparse(spec.terms)) return sparseShard(spec, request, means);
    const store = new RowStore(spec, means);
    let built: Checked<BuiltShard> | null = null;
    try {
      const read = await means.readInParts(request, (part) => store.append(part));
      built = read.ok ? store.finish(read.value.rowsDropped) : read;
      return built;
    } finally {
      if (built?.ok !== true) store.close();
    }
  };
}

async function sparseShard(
  spec: FitSpecification,
  request: TableRequest,
  { readTable, memoryBytes }: StoreMeans,
): Promise<Checked<BuiltShard>> {
  const table = await readTable(request, memoryBytes);
  if (!table.ok) return table;
  const raw = buildRawShard(spec, table.value);
  return raw.ok ? succeed({ raw: raw.value, cache: null, bytesOnDisk: 0 }) : raw;
}

/** The design of a shard in the making. */
class RowStore {
  readonly #assembly: ShardAssembly;
  readonly #means: StoreMeans;
  readonly #width: number;
  /** Copies of the design in memory: as it is, as solver columns, and these once more in a ring of folds. */
  readonly #copies: number;
  #inMemory: DesignPart[] = [];
  #writer: RowCacheWriter | null = null;
  /** Rows where the limit is too small for what is kept of each; they are counted to the end. */
  #rowsCounted: number | null = null;

  constructor(spec: FitSpecification, means: StoreMeans) {
    this.#assembly = new ShardAssembly(spec);
    this.#means = means;
    this.#width = this.#assembly.columns.length;
    this.#copies = spec.choose?.kind === 'folds' ? 3 : 2;
  }

  append(table: Table): Checked<null> {
    if (this.#rowsCounted !== null) {
      this.#rowsCounted += table.rowCount;
      return succeed(null);
    }
    const part = this.#assembly.append(table);
    if (!part.ok) return part;
    const { rowCount } = this.#assembly;
    if (this.#neededOf(rowCount) > this.#means.memoryBytes) {
      this.#rowsCounted = rowCount;
      this.#inMemory = [];
      return succeed(null);
    }
    if (this.#writer !== null)
      return this.#writer.append(part.value.x, part.value.rowCount, part.value.groups);
    this.#inMemory.push(part.value);
    const design = 8 * rowCount * (this.#width + 1) * this.#copies;
    return this.#neededOf(rowCount) + design > this.#means.memoryBytes ? this.#toDisk() : succeed(null);
  }

  /** Bytes in memory with the design of so many rows on disk. */
  #neededOf(rows: number): number {
    return rows * this.#assembly.bytesPerRow + windowBytes(this.#width);
  }

  #toDisk(): Checked<null> {
    const writer = RowCacheWriter.open(this.#means.cachePath, this.#width);
    if (!writer.ok) return writer;
    this.#writer = writer.value;
    for (const { x, rowCount, groups } of this.#inMemory) {
      const written = writer.value.append(x, rowCount, groups);
      if (!written.ok) return written;
    }
    this.#inMemory = [];
    return succeed(null);
  }

  finish(rowsDropped: number): Checked<BuiltShard> {
    if (this.#rowsCounted !== null) return this.#tooLittle(this.#rowsCounted);
    const writer = this.#writer;
    if (writer === null) {
      const raw = this.#assembly.finish(rowsDropped, () => succeed({ rows: this.#dense(), grouped: false }));
      return raw.ok ? succeed({ raw: raw.value, cache: null, bytesOnDisk: 0 }) : raw;
    }
    const caches: RowCache[] = [];
    const raw = this.#assembly.finish(rowsDropped, (order) => {
      const cache = writer.finish(order);
      if (!cache.ok) return cache;
      caches.push(cache.value);
      return succeed({ rows: new RawStreamedRows(cache.value), grouped: true });
    });
    return raw.ok ? succeed({ raw: raw.value, cache: caches[0], bytesOnDisk: writer.bytes }) : raw;
  }

  #dense(): RawDenseRows {
    const x = new Float64Array(this.#assembly.rowCount * this.#width);
    let at = 0;
    for (const part of this.#inMemory) {
      x.set(part.x, at);
      at += part.x.length;
    }
    this.#inMemory = [];
    return new RawDenseRows(x, this.#width, this.#assembly.rowCount);
  }

  #tooLittle(rows: number): ReturnType<typeof fail> {
    const needed = sizeText(this.#neededOf(rows));
    const given = sizeText(this.#means.memoryBytes);
    return fail(
      'table-unreadable',
      `--memory ${given} is too small for this table: responses and what the solvers keep of ${rows} rows take ${needed}.`,
      { remedy: `Join with --memory ${needed} or more; the design columns themselves stay on disk.` },
    );
  }

  close(): void {
    this.#writer?.close();
    this.#writer = null;
    this.#inMemory = [];
  }
}
