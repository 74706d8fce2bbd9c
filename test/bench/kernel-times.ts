import type { Kernel, KernelName, KernelVariant } from '../../numerics/kernels/kernel.js';
import { plainKernel } from '../../numerics/kernels/plain.js';
import { seededRandom } from '../../numerics/random.js';
import { lossOf } from '../../worker/losses/index.js';
import { kernelBytes, kernelVariant } from '../../worker/service/kernel-file.js';
import { must } from '../support/method-driver.js';

/** Times of the kernels in one process, each in alternation with what this machine can do at most. */
export interface KernelTime {
  readonly name: string;
  readonly kernel: KernelName;
  /** Rate over that of the limit: 128-bit multiply-adds in registers, or one read of the same number of bytes. */
  readonly ratio: number;
  readonly limit: 'multiply-add' | 'memory read';
  /** 1e9 floating-point operations, or bytes, a second: ours and the limit's. */
  readonly rate: number;
  readonly rateOfLimit: number;
  /** Time of the plain twin over ours. */
  readonly timesPlain: number;
}

/** `rows` scales the tables: 1 for those of the issue. Every time is the least of so many `repeats`. */
export interface KernelBench {
  readonly rows: number;
  readonly repeats: number;
}

interface Limits {
  readMemory(from: number, bytes: number): number;
  multiplyAdd(times: number, factor: number, term: number): number;
}

/** One thing to time: `amount` operations or bytes. */
interface Piece {
  readonly name: string;
  readonly limit: KernelTime['limit'];
  readonly amount: number;
  /** How often it is run in a row to be timed. */
  readonly times: number;
  readonly run: (kernel: Kernel) => void;
}

/** Rows by name, columns, and what is timed there. */
const SHAPES = [
  { named: 1e5, p: 100, what: 'matrices' },
  { named: 2e4, p: 500, what: 'matrices' },
  { named: 1e6, p: 50, what: 'passes' },
  { named: 1e5, p: 500, what: 'passes' },
] as const;
type Shape = (typeof SHAPES)[number] & { readonly rows: number };

const LIMIT_ROUNDS = 2_000_000;
/** Operations of one round of the limit (assembly/limits.ts). */
const LIMIT_OPERATIONS = 48;

export async function kernelTimes(bench: KernelBench, nowMs: () => number): Promise<KernelTime[]> {
  const times: KernelTime[] = [];
  for (const name of ['simd', 'relaxed'] as const) {
    const variant = must(await kernelVariant(name, () => undefined));
    const limits = limitsOf(must(await kernelBytes(name)));
    for (const shape of SHAPES) {
      const rows = Math.max(1000, Math.round(shape.named * bench.rows));
      times.push(...timesAt(variant, limits, { ...shape, rows }, bench.repeats, nowMs));
    }
  }
  return times;
}

interface Limit extends Limits {
  /** Bytes that can be read. */
  readonly bytes: number;
}

function limitsOf(bytes: Uint8Array): (bytes: number) => Limit {
  return (size) => {
    const pages = Math.ceil(size / 65_536) + 1;
    const memory = new WebAssembly.Memory({ initial: pages, maximum: pages, shared: true });
    new Float64Array(memory.buffer).fill(1);
    const instance = new WebAssembly.Instance(new WebAssembly.Module(bytes), { env: { memory } });
    return { ...(instance.exports as unknown as Limits), bytes: 256 * Math.floor(size / 256) };
  };
}

function timesAt(
  variant: KernelVariant,
  limits: (bytes: number) => Limit,
  shape: Shape,
  repeats: number,
  nowMs: () => number,
): KernelTime[] {
  const { rows, p } = shape;
  const bytes = 8 * rows * p;
  const limit = limits(bytes);
  const kernel = variant.open({ columns: p, numbers: rows * (p + 1) + 16 });
  const inside = filled(kernel, rows, p);
  // the twin gets a share of the rows: its time a row is all that is wanted
  const share = Math.max(1000, Math.round(rows / 10));
  const outside = filled(plainKernel, share, p);
  const mine = piecesOf(inside, shape);
  const twins = piecesOf(outside, shape);
  return mine.map((piece, k) => {
    let [ours, most, twin] = [1, 1, 1].map(() => Number.POSITIVE_INFINITY);
    const msOf = (run: () => void, times: number): number => {
      const started = nowMs();
      for (let time = 0; time < times; time++) run();
      return (nowMs() - started) / times;
    };
    const { times } = piece;
    for (let repeat = 0; repeat < repeats; repeat++) {
      const limitMs = msOf(() => reach(piece.limit, limit), 1);
      const oursMs = msOf(() => piece.run(kernel), times);
      most = Math.min(most, limitMs);
      ours = Math.min(ours, oursMs);
      if (repeat >= 2) continue;
      const twinMs = msOf(() => twins[k].run(plainKernel), times);
      twin = Math.min(twin, twinMs);
    }
    const rate = piece.amount / ours / 1e6;
    const reached = piece.limit === 'memory read' ? limit.bytes : LIMIT_ROUNDS * LIMIT_OPERATIONS;
    const rateOfLimit = reached / most / 1e6;
    const timesPlain = (twin * piece.amount) / twins[k].amount / ours;
    const { name, limit: of } = piece;
    return {
      name,
      kernel: variant.name,
      ratio: rate / rateOfLimit,
      limit: of,
      rate,
      rateOfLimit,
      timesPlain,
    };
  });
}

function reach(limit: KernelTime['limit'], limits: Limit): void {
  const sum =
    limit === 'memory read'
      ? limits.readMemory(1024, limits.bytes)
      : limits.multiplyAdd(LIMIT_ROUNDS, 1e-9, 1);
  if (!Number.isFinite(sum)) throw new Error(`the limit gave ${sum}`);
}

interface Filled {
  readonly rows: number;
  readonly x: Float64Array;
  readonly y: Float64Array;
}

function filled(kernel: Kernel, rows: number, p: number): Filled {
  const random = seededRandom(1);
  const x = kernel.numbers(rows * p);
  for (let at = 0; at < x.length; at++) x[at] = random.uniform() - 0.5;
  const y = kernel.numbers(rows);
  for (let at = 0; at < y.length; at++) y[at] = Number(random.uniform() < 0.5);
  return { rows, x, y };
}

function piecesOf({ rows, x, y }: Filled, { p, named, what }: Shape): Piece[] {
  const theta = new Float64Array(p).fill(0.1);
  const along = new Float64Array(rows).fill(0.1);
  const sums = new Float64Array(p);
  const state = { eta: new Float64Array(rows), slopes: new Float64Array(rows) };
  const table = { rowCount: rows, p, x, y, weights: null, offset: null, rowCountTotal: rows };
  const size = `${named.toExponential().replace('+', '')}×${p}`;
  const bytes = 8 * rows * p;
  const pass = { theta, state, gradient: sums };
  const logistic = lossOf({ kind: 'logistic' });
  if (what === 'matrices')
    return [
      {
        name: `weighted Gram ${size}`,
        limit: 'multiply-add',
        amount: rows * p * (p + 1),
        times: 1,
        run: (kernel) => kernel.weightedGram(x, rows, p, along, 1),
      },
      ...(p === 500 ? [choleskyPiece(p)] : []),
    ];
  return [
    {
      name: `y = Xb ${size}`,
      limit: 'memory read',
      amount: bytes,
      times: 1,
      run: (kernel) => kernel.rowProducts(x, p, 0, rows, theta, along),
    },
    {
      name: `Xᵀr ${size}`,
      limit: 'memory read',
      amount: bytes,
      times: 1,
      run: (kernel) => kernel.addWeightedRows(x, p, 0, rows, along, sums),
    },
    {
      name: `logistic loss and gradient ${size}`,
      limit: 'memory read',
      amount: bytes,
      times: 1,
      run: (kernel) => kernel.passes(table, logistic, [pass]),
    },
    {
      name: `logistic loss and gradient at 4 points ${size}`,
      limit: 'memory read',
      amount: 4 * bytes,
      times: 1,
      run: (kernel) => kernel.passes(table, logistic, [pass, pass, pass, pass]),
    },
  ];
}

function choleskyPiece(p: number): Piece {
  const matrix = new Float64Array(p * p).fill(1);
  for (let j = 0; j < p; j++) matrix[j * p + j] = p;
  return {
    name: `Cholesky ${p}`,
    limit: 'multiply-add',
    amount: (p * p * p) / 3,
    times: 25,
    run: (kernel) => {
      if (kernel.factorise(matrix, p) === null) throw new Error('not positive definite');
    },
  };
}
