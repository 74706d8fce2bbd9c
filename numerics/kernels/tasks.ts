import { blockRows, PACKED_ROWS, POINTS_MOST, paddedColumns } from './kernel-memory.js';
import { bandStart } from './stripes.js';
import type { KernelExports } from './variants.js';

/** What a job does; its tasks are the stripes of its rows, or for `bands` the bands of a Gram matrix. */
export const JOB_KINDS = {
  products: 0,
  rowSums: 1,
  squareSums: 2,
  gramStripes: 3,
  gramBands: 4,
  pass: 5,
  curvatures: 6,
} as const;

const FIELDS = [
  'kind',
  'rows',
  'p',
  'stripeRows',
  'x',
  'y',
  'weights',
  'offset',
  'theta',
  'eta',
  'out',
  'sums',
  'slotNumbers',
  'packed',
  'packedNumbers',
  'bands',
  'loss',
  'threshold',
  'rowCountTotal',
  'points',
] as const;

/** Numbers of a job: addresses in bytes, 0 for none. `out` and `sums` of stripe k lie k slots after those of stripe 0. */
export type JobNumbers = Record<(typeof FIELDS)[number], number>;

/** One job over rows that lie in the kernel's memory. */
export interface Job extends JobNumbers {
  /** Of each point: where its predictors and slopes go, and 1 where its gradient is wanted. */
  readonly etas: number[];
  readonly slopes: number[];
  readonly steep: readonly number[];
}

const NOTHING = Object.fromEntries(FIELDS.map((field) => [field, 0])) as JobNumbers;

/** A job of the numbers given; the others are 0. */
export const jobOf = (given: Partial<Job>): Job => ({
  ...NOTHING,
  etas: [],
  slopes: [],
  steep: [],
  ...given,
});

/** The job as it stands in the memory, for the other threads. */
export function writeJob(job: Job, into: Float64Array): void {
  FIELDS.forEach((field, k) => {
    into[k] = job[field];
  });
  [job.etas, job.slopes, job.steep].forEach((list, k) => {
    into.set(list, FIELDS.length + k * POINTS_MOST);
  });
}

export function readJob(from: Float64Array): Job {
  const numbers = Object.fromEntries(FIELDS.map((field, k) => [field, from[k]])) as JobNumbers;
  const [etas, slopes, steep] = [0, 1, 2].map((k) => {
    const start = FIELDS.length + k * POINTS_MOST;
    return [...from.subarray(start, start + numbers.points)];
  });
  return { ...numbers, etas, slopes, steep };
}

/** Does task k of the job on thread `member` (0: the calling one). */
export function runTask(code: KernelExports, job: Job, k: number, member: number): void {
  const from = job.kind === JOB_KINDS.gramBands ? 0 : k * job.stripeRows;
  const rows = job.kind === JOB_KINDS.gramBands ? job.rows : Math.min(job.stripeRows, job.rows - from);
  const out = job.out + 8 * k * job.slotNumbers;
  const x = job.x + 8 * from * job.p;
  const weights = behind(job.weights, from);
  switch (job.kind) {
    case JOB_KINDS.products:
      code.rowProducts(x, job.p, rows, job.theta, job.out + 8 * from);
      return;
    case JOB_KINDS.rowSums:
      code.addWeightedRows(x, job.p, rows, weights, out);
      return;
    case JOB_KINDS.squareSums:
      code.addWeightedSquares(x, job.p, rows, weights, out);
      return;
    case JOB_KINDS.gramStripes:
      addGram(code, job, member, x, rows, weights, out, 0, paddedColumns(job.p));
      return;
    case JOB_KINDS.gramBands: {
      const [first, end] = [k, k + 1].map((band) => bandStart(band, job.bands, paddedColumns(job.p)));
      addGram(code, job, member, x, rows, weights, job.out, first, end);
      return;
    }
    case JOB_KINDS.pass:
      pass(code, job, k, from, rows);
      return;
    case JOB_KINDS.curvatures: {
      const { loss, threshold, rowCountTotal } = job;
      const [y, eta] = [job.y, job.eta].map((start) => start + 8 * from);
      code.curvatures(loss, threshold, rowCountTotal, rows, y, weights, eta, job.out + 8 * from);
      return;
    }
    default:
      throw new RangeError(`no job is of kind ${job.kind}`);
  }
}

/** Of an array with one number a row, where there is one. */
const behind = (start: number, rows: number): number => (start === 0 ? 0 : start + 8 * rows);

function addGram(
  code: KernelExports,
  job: Job,
  member: number,
  x: number,
  rows: number,
  weights: number,
  out: number,
  first: number,
  end: number,
): void {
  const { p } = job;
  const padded = paddedColumns(p);
  const packed = job.packed + 8 * member * job.packedNumbers;
  for (let r = 0; r < rows; r += PACKED_ROWS) {
    const count = Math.min(PACKED_ROWS, rows - r);
    code.packRows(x + 8 * r * p, p, count, behind(weights, r), packed, padded);
    code.addGram(packed, padded, count, out, first, end);
  }
}

/** Rows that several points read one after the other come in blocks that stay in the cache. */
function pass(code: KernelExports, job: Job, k: number, start: number, count: number): void {
  const { loss, threshold, rowCountTotal, p, points, slotNumbers } = job;
  const padded = paddedColumns(p);
  const step = points === 1 ? count : blockRows(p);
  for (let from = start; from < start + count; from += step) {
    const rows = Math.min(step, start + count - from);
    const [y, w, o] = [job.y, job.weights, job.offset].map((array) => behind(array, from));
    const x = job.x + 8 * from * p;
    for (let point = 0; point < points; point++) {
      const theta = job.theta + 8 * point * padded;
      const gradient = job.steep[point] === 0 ? 0 : job.out + 8 * (k * slotNumbers + point * padded);
      const sums = job.sums + 16 * (k * POINTS_MOST + point);
      const [eta, slopes] = [job.etas, job.slopes].map((list) => behind(list[point], from));
      code.pass(loss, threshold, rowCountTotal, x, p, rows, y, w, o, theta, eta, slopes, gradient, sums);
    }
  }
}
