import fc from 'fast-check';
import { afterAll, describe, expect, test } from 'vitest';
import type { Kernel, LossRows } from '../../numerics/kernels/kernel.js';
import { FIRST_BYTE } from '../../numerics/kernels/kernel-memory.js';
import { plainKernel } from '../../numerics/kernels/plain.js';
import { wasmVariant } from '../../numerics/kernels/variants.js';
import { seededRandom } from '../../numerics/random.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { lossOf } from '../../worker/losses/index.js';
import { openCrew } from '../../worker/service/crew.js';
import { kernelBytes, kernelVariant } from '../../worker/service/kernel-file.js';
import { must } from '../support/method-driver.js';

/** One thread and several, and a memory that held rubbish before: always the same bits. */
const crews = await Promise.all([2, 3, 4].map(async (size) => must(await openCrew(size))));
afterAll(() => Promise.all(crews.map((crew) => crew.close())));
// asked for first: it lets this Node take relaxed SIMD
const names = ['simd', 'relaxed'] as const;
const modules = await Promise.all(
  names.map(async (name) => {
    must(await kernelVariant(name, () => undefined));
    return [name, new WebAssembly.Module(must(await kernelBytes(name)))] as const;
  }),
);

const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 0.7 },
];

interface Case {
  readonly seed: number;
  readonly n: number;
  readonly p: number;
  readonly loss: LossForm;
  readonly weighted: boolean;
  readonly shifted: boolean;
  /** Whether the numbers of rows beside x, and results, lie in the kernel's memory. */
  readonly inside: boolean;
  /** Of the predictors. */
  readonly spread: number;
}

const caseOf = (sizes: fc.Arbitrary<readonly [number, number]>): fc.Arbitrary<Case> =>
  fc
    .record({
      seed: fc.integer({ min: 1, max: 1e9 }),
      size: sizes,
      loss: fc.constantFrom(...LOSSES),
      weighted: fc.boolean(),
      shifted: fc.boolean(),
      inside: fc.boolean(),
      spread: fc.constantFrom(1, 1000, 1e300),
    })
    .map(({ size: [n, p], ...rest }) => ({ ...rest, n, p }));

/** Large enough for several threads, with stripes that end badly; 130 and 257 columns are made in bands. */
const shared = fc.constantFrom(
  [90_001, 3],
  [20_011, 17],
  [6000, 50],
  [9001, 64],
  [2100, 130],
  [1500, 257],
  [300, 1500],
  [270_001, 2],
) as fc.Arbitrary<readonly [number, number]>;
const small = fc
  .tuple(fc.constantFrom(0, 1, 2, 3, 63, 65, 255, 257, 1025), fc.constantFrom(1, 2, 3, 5, 7, 9, 33, 131))
  .map((pair) => pair as readonly [number, number]);

const room = ({ n, p }: Case) => ({ columns: p, numbers: n * (p + 8) + 256 });

/** Every result of a kernel over the rows of a case. */
function answers(given: Case, kernel: Kernel): Buffer[] {
  const { n, p, loss: form } = given;
  const random = seededRandom(given.seed);
  const filled = (count: number, inside: boolean, value: (at: number) => number): Float64Array => {
    const out = inside ? kernel.numbers(count) : new Float64Array(count);
    for (let at = 0; at < count; at++) out[at] = value(at);
    return out;
  };
  const x = filled(n * p, true, () => random.uniform() - 0.5);
  const column = (value: () => number): Float64Array => filled(n, given.inside, value);
  const theta = filled(p, false, () => (given.spread * (random.uniform() - 0.5)) / p);
  const rows: LossRows = {
    rowCount: n,
    p,
    x,
    y: column(() => Number(random.uniform() < 0.5)),
    weights: given.weighted ? column(() => random.integer(3)) : null,
    offset: given.shifted ? column(() => random.uniform() - 0.5) : null,
    rowCountTotal: n + 1,
  };
  const loss = lossOf(form);
  const state = { eta: column(() => Number.NaN), slopes: column(() => Number.NaN) };
  const points = [1, -0.5, 0.25].map((share, k) => ({
    theta: theta.map((value) => share * value),
    state: k === 0 ? state : null,
    gradient: k === 1 ? null : new Float64Array(p).fill(Number.NaN),
  }));
  const values = kernel.passes(rows, loss, points);
  const along = column(() => Number.NaN);
  kernel.rowProducts(x, p, 0, n, theta, along);
  const sums = [new Float64Array(p).fill(0.1), new Float64Array(p).fill(0.2)];
  const scales = filled(n, given.inside, (at) => (at % 3) - 1);
  kernel.addWeightedRows(x, p, 0, n, scales, sums[0]);
  kernel.addWeightedSquares(x, p, 0, n, scales, sums[1]);
  const gram = kernel.weightedGram(x, n, p, rows.weights, 0.5);
  const gradients = points.flatMap(({ gradient }) => (gradient === null ? [] : [gradient]));
  const bends = kernel.curvatures(rows, loss, state.eta);
  const scalars = Float64Array.from(values.flatMap(({ value, magnitude }) => [value, magnitude]));
  return [scalars, ...gradients, state.eta, state.slopes, along, ...sums, gram, bends].map(bitsOf);
}

/** The bits of the numbers, with one pattern for NaN. */
const bitsOf = (numbers: Float64Array): Buffer =>
  Buffer.from(numbers.map((value) => (Number.isNaN(value) ? Number.NaN : value)).buffer);

const sameBits = (got: readonly Buffer[], want: readonly Buffer[]): boolean[] =>
  want.map((bits, k) => bits.equals(got[k]));

const hasNaN = (bits: Buffer): boolean =>
  new Float64Array(bits.buffer, bits.byteOffset, bits.length / 8).some(Number.isNaN);

describe.each(modules)('%s', (name, module) => {
  const without = (message: string): never => {
    throw new Error(message);
  };
  const alone = wasmVariant(name, module, without);

  test('one thread and several give the same bits', () => {
    fc.assert(
      fc.property(caseOf(shared), fc.constantFrom(...crews), (given, crew) => {
        const several = wasmVariant(name, module, without, crew);
        expect(several.threads).toBe(crew.size);
        const got = answers(given, several.open(room(given)));
        expect(sameBits(got, answers(given, alone.open(room(given))))).not.toContain(false);
      }),
      { numRuns: 9 },
    );
  }, 60_000);

  test('memory that held NaN before changes no bit', () => {
    fc.assert(
      fc.property(caseOf(small), fc.constantFrom(null, null, null, null, crews[0]), (given, crew) => {
        const kernel = wasmVariant(name, module, without, crew).open(room(given));
        new Float64Array(kernel.numbers(0).buffer, FIRST_BYTE).fill(Number.NaN);
        const got = answers(given, kernel);
        expect(sameBits(got, answers(given, alone.open(room(given))))).not.toContain(false);
        const { n, p, spread } = given;
        // nor is any of it NaN but what is NaN by its nature: 0 · ∞ far out
        if (spread < 1e300) expect(got.map(hasNaN)).not.toContain(true);
        const a = plainKernel.weightedGram(new Float64Array(p * p).fill(0.1), p, p, null, 1);
        for (let j = 0; j < p; j++) a[j * p + j] += 1;
        const solved = kernel.factorise(a, p)?.solve(new Float64Array(p).fill(n));
        expect(solved?.every(Number.isFinite)).toBe(true);
        const accumulator = kernel.factorAccumulator(p);
        accumulator.append(new Float64Array(3 * p).fill(0.5), 3);
        expect(accumulator.packed().every(Number.isFinite)).toBe(true);
      }),
      { numRuns: 60 },
    );
  }, 60_000);
});
