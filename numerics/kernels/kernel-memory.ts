import type { KernelRoom } from './kernel.js';
import { STRIPES_MOST, WAVE_ROWS_MOST } from './stripes.js';

/** Bytes of a page of WebAssembly memory. */
const PAGE_BYTES = 65_536;
/** Pages a memory may have; the last of the 65,536 stays out, so that an address after the end is still an address. */
const PAGES_MOST = 65_535;
/** Bytes left free at the start: 0 means "none" to the kernels, and their constants lie after the first 1024. */
export const FIRST_BYTE = 4096;
/** Arrays begin at multiples of this, a line of the cache. */
const ALIGNMENT = 64;

/** Widest matrix whose square has its place in the memory: 288 MiB, of which only what is used becomes resident. */
export const SQUARE_COLUMNS_MOST = 6144;
/** Widest row for which there is a memory at all. */
export const COLUMNS_MOST = 65_536;
/** Widest Gram matrix of which every stripe of rows has one; of wider ones every thread makes a band. */
export const STRIPED_COLUMNS_MOST = 128;
/** Points of one read of the rows. */
export const POINTS_MOST = 8;
/** Rows that packed blocks hold, and numbers from one packed column to the next (assembly/gram.ts). */
export const PACKED_ROWS = 256;
const PACKED_STRIDE = 264;
/** Numbers of x in a block that several points read one after the other: it stays in the second-level cache. */
const BLOCK_NUMBERS = 32_768;
export const BLOCK_ROWS_MOST = 1024;
/** Numbers left for a job (tasks.ts), the first in the memory. */
export const JOB_NUMBERS = 64;

/** Rows of a block; depends on the number of columns alone, so that sums do not depend on anything else. */
export const blockRows = (p: number): number =>
  Math.min(BLOCK_ROWS_MOST, Math.max(64, 64 * Math.floor(BLOCK_NUMBERS / (64 * Math.max(p, 1)))));

/** Columns as the square and the packed blocks hold them: whole tiles. */
export const paddedColumns = (p: number): number => 4 * Math.ceil(p / 4);

/** Where the numbers of some rows that lie elsewhere are copied to, and where results of rows go. */
export interface RowAreas {
  readonly rows: number;
  /** By point. */
  readonly etas: readonly number[];
  readonly slopes: readonly number[];
  readonly y: number;
  readonly weights: number;
  readonly offset: number;
}

/** One WebAssembly memory: work areas first, then room for the shard. Addresses in bytes. */
export class KernelMemory {
  readonly memory: WebAssembly.Memory;
  readonly all: Float64Array;
  /** Columns that the work areas are made for. */
  readonly columns: number;
  readonly hasSquare: boolean;
  /** What the other threads are to do. */
  readonly job: number;
  readonly theta: number;
  /**
   * Sums of columns: a slot for each stripe, in it one for each point. Slots next to each other would pass their lines of
   * the cache to and fro between threads (a third of the time of X'r).
   */
  readonly gradient: number;
  readonly slotNumbers: number;
  /** φ and magnitude of each point of each stripe. */
  readonly sums: number;
  readonly block: RowAreas;
  /** Null where one thread works alone. */
  readonly wave: RowAreas | null;
  /** A block of rows of x that lie elsewhere. */
  readonly x: number;
  /** One for each thread, so many numbers apart. */
  readonly packed: number;
  readonly packedNumbers: number;
  readonly square: number;
  /** Gram matrices of the stripes. */
  readonly squares: number;
  readonly #buffer: SharedArrayBuffer;
  #next = FIRST_BYTE;
  readonly #end: number;

  /** Throws a RangeError where the machine does not give the memory. */
  constructor(room: KernelRoom, threads: number) {
    const columns = room.columns + 1;
    const padded = paddedColumns(columns);
    const slots = threads === 1 ? 1 : STRIPES_MOST;
    this.columns = columns;
    this.hasSquare = columns <= SQUARE_COLUMNS_MOST;
    this.job = this.#take(JOB_NUMBERS);
    this.theta = this.#take(POINTS_MOST * padded);
    this.slotNumbers = POINTS_MOST * padded;
    this.gradient = this.#take(slots * this.slotNumbers);
    this.sums = this.#take(2 * slots * POINTS_MOST);
    this.block = this.#rowAreas(BLOCK_ROWS_MOST);
    this.wave = threads === 1 ? null : this.#rowAreas(WAVE_ROWS_MOST);
    this.x = this.#take(Math.max(BLOCK_NUMBERS, (this.hasSquare ? PACKED_ROWS : 64) * columns));
    this.packedNumbers = this.hasSquare ? PACKED_STRIDE * padded : 0;
    this.packed = this.#take(threads * this.packedNumbers);
    this.square = this.#take(this.hasSquare ? padded * padded : 0);
    this.squares = this.#take(slots * Math.min(padded, STRIPED_COLUMNS_MOST) ** 2);
    const wanted = Math.ceil((this.#next + 8 * room.numbers) / PAGE_BYTES);
    // a shard with no room here stays outside and is copied in by blocks
    const pages = wanted <= PAGES_MOST ? wanted : Math.ceil(this.#next / PAGE_BYTES);
    this.memory = new WebAssembly.Memory({ initial: pages, maximum: pages, shared: true });
    this.#buffer = this.memory.buffer;
    this.all = new Float64Array(this.#buffer);
    this.#end = pages * PAGE_BYTES;
  }

  /** Zeros in this memory, or null where there is no room left. */
  allocate(count: number): Float64Array | null {
    if (this.#next + 8 * count > this.#end) return null;
    return new Float64Array(this.#buffer, this.#take(count), count);
  }

  /** Where results for entry `at` of the array go: itself, or `area`, from which `collect` takes them. */
  target(array: Float64Array, at: number, area: number): number {
    return this.holds(array) ? array.byteOffset + 8 * at : area;
  }

  collect(array: Float64Array, at: number, count: number, area: number): void {
    if (!this.holds(array)) array.set(this.view(area, count), at);
  }

  /** Where entry `at` of the array lies: itself, or a copy of `count` numbers at `area`. */
  address(array: Float64Array, at: number, count: number, area: number): number {
    if (this.holds(array)) return array.byteOffset + 8 * at;
    this.write(area, array.subarray(at, at + count));
    return area;
  }

  /** The first `count` numbers of the slots of so many stripes become zeros. */
  clearSlots(stripes: number, count: number): void {
    for (let k = 0; k < stripes; k++) this.view(this.gradient + 8 * k * this.slotNumbers, count).fill(0);
  }

  holds(array: Float64Array): boolean {
    return array.buffer === this.#buffer;
  }

  write(area: number, values: Float64Array): void {
    this.all.set(values, area / 8);
  }

  view(area: number, count: number): Float64Array {
    return this.all.subarray(area / 8, area / 8 + count);
  }

  #rowAreas(rows: number): RowAreas {
    const [etas, slopes] = [0, 1].map(() => Array.from({ length: POINTS_MOST }, () => this.#take(rows)));
    return { rows, etas, slopes, y: this.#take(rows), weights: this.#take(rows), offset: this.#take(rows) };
  }

  #take(count: number): number {
    const at = this.#next;
    this.#next = ALIGNMENT * Math.ceil((at + 8 * count) / ALIGNMENT);
    return at;
  }
}
