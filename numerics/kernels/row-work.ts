import type { CrewPost } from './crew.js';
import {
  BLOCK_ROWS_MOST,
  blockRows,
  JOB_NUMBERS,
  type KernelMemory,
  type RowAreas,
} from './kernel-memory.js';
import { type Stretch, stretches, stripeRows, waveRows } from './stripes.js';
import { type Job, runTask, writeJob } from './tasks.js';
import type { KernelExports } from './variants.js';

/** Work of less than this, in numbers of x read once, is done before another thread would have woken up. */
const SHARED_NUMBERS_LEAST = 262_144;

/** A job over rows, wherever these lie, and what becomes of its results. */
export interface RowWork {
  readonly job: Job;
  /** Row-major rows of p columns; null where the job reads numbers of rows alone. */
  readonly x: Float64Array | null;
  /** First row of x that belongs to the work, and how many. */
  readonly first: number;
  readonly rowCount: number;
  /** Columns by which the rows are cut into stripes. */
  readonly width: number;
  /** What one row costs, in numbers of x read once. */
  readonly effort: number;
  /** Whether the other threads take bands of a matrix instead of stripes of rows. */
  readonly inBands: boolean;
  /** Most rows of a block that is copied in. */
  readonly blockRows: number;
  /** Sets in the job where the numbers of rows `from` … lie and go; those that lie elsewhere are copied to the areas. */
  aim(areas: RowAreas, from: number, count: number): void;
  /** Takes results of rows from the areas. */
  collect(areas: RowAreas, from: number, count: number): void;
  /** Sets the sums of so many stripes to zero. */
  clear(stripes: number): void;
  /** Adds the sums in the slot of a stripe to the results. */
  merge(stripe: number): void;
}

/** Does work over rows on one thread, or on those of a crew where that pays; the bits are the same. */
export class RowWorker {
  constructor(
    private readonly code: KernelExports,
    private readonly place: KernelMemory,
    private readonly crew: { readonly size: number; readonly post: CrewPost } | null,
  ) {}

  do(work: RowWork): void {
    for (const wave of stretches(work.rowCount, waveRows(work.width))) {
      const pays = wave.count * work.effort >= SHARED_NUMBERS_LEAST;
      const inside = work.x === null || this.place.holds(work.x);
      if (!pays || !inside || !this.#together(work, wave)) this.#alone(work, wave);
    }
  }

  /** False where there is no crew. */
  #together(work: RowWork, wave: Stretch): boolean {
    const { code, place, crew } = this;
    if (crew === null || place.wave === null) return false;
    const { job } = work;
    job.rows = wave.count;
    job.stripeRows = stripeRows(wave.count, work.width);
    job.bands = crew.size;
    const stripes = Math.ceil(wave.count / job.stripeRows);
    work.clear(stripes);
    this.#aim(work, place.wave, wave);
    writeJob(job, place.view(place.job, JOB_NUMBERS));
    crew.post.run(work.inBands ? crew.size : stripes, (task) => runTask(code, job, task, 0));
    work.collect(place.wave, wave.from, wave.count);
    for (let stripe = 0; stripe < stripes; stripe++) work.merge(stripe);
    return true;
  }

  #alone(work: RowWork, wave: Stretch): void {
    const { job, x } = work;
    const { block } = this.place;
    const copied = x !== null && !this.place.holds(x);
    const step = copied ? work.blockRows : BLOCK_ROWS_MOST;
    job.bands = 1;
    for (const stripe of stretches(wave.count, stripeRows(wave.count, work.width))) {
      work.clear(1);
      for (let done = 0; done < stripe.count; done += step) {
        const from = wave.from + stripe.from + done;
        const count = Math.min(step, stripe.count - done);
        job.rows = count;
        job.stripeRows = count;
        this.#aim(work, block, { from, count });
        runTask(this.code, job, 0, 0);
        work.collect(block, from, count);
      }
      work.merge(0);
    }
  }

  #aim(work: RowWork, areas: RowAreas, { from, count }: Stretch): void {
    const { job, x } = work;
    const at = (work.first + from) * job.p;
    if (x !== null) job.x = this.place.address(x, at, count * job.p, this.place.x);
    work.aim(areas, from, count);
  }
}

export const nothing = (): void => undefined;

/** The usual cut of rows, and what they cost. */
export const overRows = (
  x: Float64Array | null,
  width: number,
  first: number,
  rowCount: number,
): Pick<RowWork, 'x' | 'first' | 'rowCount' | 'width' | 'effort' | 'inBands' | 'blockRows'> => ({
  x,
  first,
  rowCount,
  width,
  effort: width,
  inBands: false,
  blockRows: blockRows(width),
});

/** to += from. */
export function addTo(from: Float64Array, to: Float64Array): void {
  for (let at = 0; at < from.length; at++) to[at] += from[at];
}
