import type { Kernel, KernelName, KernelVariant } from '../../numerics/kernels/kernel.js';
import { plainKernel } from '../../numerics/kernels/plain.js';
import { kernelBytes, kernelVariant } from '../../worker/service/kernel-file.js';
import { must } from '../support/method-driver.js';
import { filled, type Piece, piecesOf, SHAPES, type Shape } from './kernel-pieces.js';

/** Times of the kernels in one process, each in alternation with what this machine can do at most. */
export interface KernelTime {
  readonly name: string;
  readonly kernel: KernelName;
  readonly threads: number;
  /**
   * Rate over that of what it is measured by: 128-bit multiply-adds in registers, one read of the same number of bytes, or
   * for several threads one thread.
   */
  readonly ratio: number;
  readonly limit: 'multiply-add' | 'memory read' | 'one thread';
  /** 1e9 floating-point operations, or bytes, a second: ours and the limit's. */
  readonly rate: number;
  readonly rateOfLimit: number;
  /** Time of the plain twin over ours; null where it was not measured. */
  readonly timesPlain: number | null;
}

/** `rows` scales the tables: 1 for those of the issue. Every time is the least of so many `repeats`. */
export interface KernelBench {
  readonly rows: number;
  readonly repeats: number;
  /** Of one thread against two. */
  readonly threadRepeats: number;
}

/** Milliseconds: of this process on any processor, and on the wall, which is what several threads shorten. */
export interface BenchClocks {
  cpuMs(): number;
  wallMs(): number;
}

const THREADS = 2;

interface Limits {
  readMemory(from: number, bytes: number): number;
  multiplyAdd(times: number, factor: number, term: number): number;
}

const LIMIT_ROUNDS = 2_000_000;
/** Operations of one round of the limit (assembly/limits.ts). */
const LIMIT_OPERATIONS = 48;

export async function kernelTimes(bench: KernelBench, clocks: BenchClocks): Promise<KernelTime[]> {
  const times: KernelTime[] = [];
  for (const name of ['simd', 'relaxed'] as const) {
    const variant = must(await kernelVariant(name, () => undefined));
    const several = must(await kernelVariant(name, () => undefined, THREADS));
    const limits = limitsOf(must(await kernelBytes(name)));
    for (const shape of SHAPES) {
      const rows = Math.max(1000, Math.round(shape.named * bench.rows));
      times.push(...timesAt(variant, limits, { ...shape, rows }, bench.repeats, clocks.cpuMs));
      times.push(
        ...threadTimesAt([variant, several], { ...shape, rows }, bench.threadRepeats, clocks.wallMs),
      );
    }
  }
  return times;
}

/** One thread and several in alternation, each with the rows in a memory of its own. */
function threadTimesAt(
  variants: readonly [KernelVariant, KernelVariant],
  shape: Shape,
  repeats: number,
  wallMs: () => number,
): KernelTime[] {
  const { rows, p } = shape;
  const sides = variants.map((variant) => {
    const kernel = openedFor(variant, rows, p);
    return { kernel, pieces: piecesOf(filled(kernel, rows, p), shape) };
  });
  return sides[0].pieces.flatMap(({ name, amount, onThreads }, k) => {
    if (!onThreads) return [];
    const least = sides.map(() => Number.POSITIVE_INFINITY);
    for (let repeat = 0; repeat < repeats; repeat++) {
      sides.forEach(({ kernel, pieces }, side) => {
        const started = wallMs();
        pieces[k].run(kernel);
        least[side] = Math.min(least[side], wallMs() - started);
      });
    }
    const [one, several] = least.map((ms) => amount / ms / 1e6);
    return [
      {
        name: `${name} on ${THREADS} threads`,
        kernel: variants[0].name,
        threads: variants[1].threads ?? 1,
        ratio: several / one,
        limit: 'one thread' as const,
        rate: several,
        rateOfLimit: one,
        timesPlain: null,
      },
    ];
  });
}

const openedFor = (variant: KernelVariant, rows: number, p: number): Kernel =>
  variant.open({ columns: p, numbers: rows * (p + 1) + 16 });

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
  cpuMs: () => number,
): KernelTime[] {
  const { rows, p } = shape;
  const bytes = 8 * rows * p;
  const limit = limits(bytes);
  const kernel = openedFor(variant, rows, p);
  const inside = filled(kernel, rows, p);
  // the twin gets a share of the rows: its time a row is all that is wanted
  const share = Math.max(1000, Math.round(rows / 10));
  const outside = filled(plainKernel, share, p);
  const mine = piecesOf(inside, shape);
  const twins = piecesOf(outside, shape);
  return mine.map((piece, k) => {
    let [ours, most, twin] = [1, 1, 1].map(() => Number.POSITIVE_INFINITY);
    const msOf = (run: () => void, times: number): number => {
      const started = cpuMs();
      for (let time = 0; time < times; time++) run();
      return (cpuMs() - started) / times;
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
      threads: 1,
      ratio: rate / rateOfLimit,
      limit: of,
      rate,
      rateOfLimit,
      timesPlain,
    };
  });
}

function reach(limit: Piece['limit'], limits: Limit): void {
  const sum =
    limit === 'memory read'
      ? limits.readMemory(1024, limits.bytes)
      : limits.multiplyAdd(LIMIT_ROUNDS, 1e-9, 1);
  if (!Number.isFinite(sum)) throw new Error(`the limit gave ${sum}`);
}
