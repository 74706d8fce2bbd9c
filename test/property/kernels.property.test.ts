import { readFile } from 'node:fs/promises';
import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import type { Kernel, LossRows } from '../../numerics/kernels/kernel.js';
import { plainKernel, plainVariant } from '../../numerics/kernels/plain.js';
import { instantiate, type KernelExports } from '../../numerics/kernels/variants.js';
import { packSymmetric } from '../../numerics/packed.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import { scaleParts } from '../../worker/design/scale.js';
import type { RawShard } from '../../worker/design/shard.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import { compiledKernels } from '../support/kernels.js';
import { must } from '../support/method-driver.js';

/** The compiled kernels against the plain twin, at sizes where blocks, tiles and vectors end badly. */
const ROWS = [0, 1, 2, 3, 4, 5, 7, 63, 64, 65, 127, 255, 256, 257, 1023, 1025, 1100] as const;
const COLUMNS = [1, 2, 3, 4, 5, 7, 8, 17, 33, 64, 65] as const;
const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 0.7 },
];
const variants = await compiledKernels();
const modules = await Promise.all(
  variants.map(async ({ name }) => {
    const bytes = await readFile(new URL(`../../dist/numerics/kernels/${name}.wasm`, import.meta.url));
    return [name, new WebAssembly.Module(bytes)] as const;
  }),
);
const TOLERANCE = 1e-13;

interface Case {
  readonly seed: number;
  readonly n: number;
  readonly p: number;
  readonly loss: LossForm;
  readonly weighted: boolean;
  readonly shifted: boolean;
  /** Whether the rows lie in the kernel's memory, and how many numbers before them. */
  readonly inside: boolean;
  readonly skew: number;
  /** Size of the predictors: the ends of the exponential function, too. */
  readonly spread: number;
}

const anyCase: fc.Arbitrary<Case> = fc.record({
  seed: fc.integer({ min: 1, max: 1e9 }),
  n: fc.constantFrom(...ROWS),
  p: fc.constantFrom(...COLUMNS),
  loss: fc.constantFrom(...LOSSES),
  weighted: fc.boolean(),
  shifted: fc.boolean(),
  inside: fc.boolean(),
  skew: fc.integer({ min: 0, max: 9 }),
  spread: fc.constantFrom(0.1, 1, 30, 1000),
});

const normals = (random: Random, count: number): Float64Array =>
  Float64Array.from({ length: count }, () => random.normal());

/** The same rows for the twin and, wherever the case says, for the kernel. */
function made(given: Case, kernel: Kernel) {
  const random = seededRandom(given.seed);
  const { n, p, skew } = given;
  const placed = (values: Float64Array): Float64Array => {
    const room = given.inside ? kernel.numbers(values.length + skew) : new Float64Array(values.length + skew);
    room.set(values, skew);
    return room.subarray(skew);
  };
  const theta = normals(random, p).map((value) => (given.spread * value) / Math.sqrt(p));
  const response = () => {
    if (given.loss.kind === 'logistic') return Number(random.uniform() < 0.5);
    return given.loss.kind === 'poisson' ? random.poisson(2) : random.normal();
  };
  const rows: LossRows = {
    rowCount: n,
    p,
    x: normals(random, n * p),
    y: Float64Array.from({ length: n }, response),
    weights: given.weighted
      ? Float64Array.from({ length: n }, () => (random.integer(4) === 0 ? 0 : 3 * random.uniform()))
      : null,
    offset: given.shifted ? normals(random, n) : null,
    rowCountTotal: 2 * n + 1,
  };
  const { x, y, weights, offset } = rows;
  const mine: LossRows = {
    ...rows,
    x: placed(x),
    y: placed(y),
    weights: weights === null ? null : placed(weights),
    offset: offset === null ? null : placed(offset),
  };
  return { theta, rows, mine, random };
}

/** Entry by entry within TOLERANCE of what each is rounded against. */
function close(got: ArrayLike<number>, want: ArrayLike<number>, size: (at: number) => number): void {
  expect(got.length).toBe(want.length);
  for (let at = 0; at < want.length; at++) {
    if (Object.is(got[at], want[at])) continue;
    expect(Math.abs(got[at] - want[at]), `entry ${at}`).toBeLessThanOrEqual(TOLERANCE * size(at));
  }
}

const absolute = (values: Float64Array): Float64Array => values.map(Math.abs);

describe.each(variants.map((variant) => [variant.name, variant] as const))('%s', (_name, variant) => {
  const opened = ({ n, p, skew }: Pick<Case, 'n' | 'p' | 'skew'>) =>
    variant.open({ columns: p, numbers: (n + skew + 16) * (p + 3) + 64 });

  test('the rows lie in its own memory', () => {
    expect(opened({ n: 3, p: 2, skew: 0 }).numbers(6).buffer).toBeInstanceOf(SharedArrayBuffer);
  });

  test('products, sums of rows, squares and the weighted Gram matrix are those of the twin', () => {
    fc.assert(
      fc.property(anyCase, (given) => {
        const kernel = opened(given);
        const { theta, rows, mine, random } = made(given, kernel);
        const { n, p } = given;
        const from = random.integer(n + 1);
        const to = from + random.integer(n - from + 1);
        const along = [kernel, plainKernel].map((each, k) => {
          const out = new Float64Array(to - from);
          each.rowProducts([mine, rows][k].x, p, from, to, theta, out);
          return out;
        });
        const sizes = new Float64Array(to - from);
        plainKernel.rowProducts(absolute(rows.x), p, from, to, absolute(theta), sizes);
        close(along[0], along[1], (at) => sizes[at]);
        const scales = normals(random, to - from);
        for (const sum of ['addWeightedRows', 'addWeightedSquares'] as const) {
          const [got, want, size] = [
            normals(seededRandom(7), p),
            normals(seededRandom(7), p),
            new Float64Array(p).fill(5),
          ];
          kernel[sum](mine.x, p, from, to, scales, got);
          plainKernel[sum](rows.x, p, from, to, scales, want);
          plainKernel[sum](absolute(rows.x), p, from, to, absolute(scales), size);
          close(got, want, (at) => size[at]);
        }
        const gram = kernel.weightedGram(mine.x, n, p, mine.weights, 0.25);
        const twin = plainKernel.weightedGram(rows.x, n, p, rows.weights, 0.25);
        const size = plainKernel.weightedGram(absolute(rows.x), n, p, rows.weights, 0.25);
        close(gram, twin, (at) => size[at]);
      }),
      { numRuns: 120 },
    );
  });

  test('a pass gives values, predictors, slopes, gradients and curvatures of the twin', () => {
    fc.assert(
      fc.property(anyCase, (given) => {
        const kernel = opened(given);
        const { theta, rows, mine } = made(given, kernel);
        const loss = lossOf(given.loss);
        const run = (each: Kernel, own: LossRows) => {
          const state = { eta: new Float64Array(given.n), slopes: new Float64Array(given.n) };
          const gradient = new Float64Array(given.p).fill(Number.NaN);
          const [pass] = each.passes(own, loss, [{ theta, state, gradient }]);
          return { ...state, gradient, ...pass, bends: each.curvatures(own, loss, state.eta) };
        };
        const got = run(kernel, mine);
        const want = run(plainKernel, rows);
        const sizes = new Float64Array(given.n);
        plainKernel.rowProducts(absolute(rows.x), given.p, 0, given.n, absolute(theta), sizes);
        close(got.eta, want.eta, (at) => sizes[at] + Math.abs(rows.offset?.[at] ?? 0));
        // rounding of η moves an exponential by as much, relatively
        const lift = (at: number): number => 1 + sizes[at] + Math.abs(rows.offset?.[at] ?? 0);
        const weight = (at: number): number => (rows.weights?.[at] ?? 1) / rows.rowCountTotal;
        const steep = (at: number): number => {
          if (given.loss.kind === 'poisson') return loss.mean(want.eta[at]) + rows.y[at];
          return given.loss.kind === 'logistic' ? 1 : 1 + sizes[at];
        };
        close(got.slopes, want.slopes, (at) => weight(at) * steep(at) * lift(at));
        if (given.loss.kind !== 'huber')
          close(got.bends, want.bends, (at) => weight(at) * steep(at) * lift(at));
        const slopeSizes = new Float64Array(given.n).map((_, at) => weight(at) * steep(at) * lift(at));
        const gradientSize = new Float64Array(given.p);
        plainKernel.addWeightedRows(absolute(rows.x), given.p, 0, given.n, slopeSizes, gradientSize);
        close(got.gradient, want.gradient, (at) => gradientSize[at]);
        const most = sizes.reduce((a, _, at) => Math.max(a, lift(at)), 1);
        const room = slopeSizes.reduce((sum, size, at) => sum + size * lift(at), 0);
        close([got.value, got.magnitude], [want.value, want.magnitude], () => want.magnitude * most + room);
      }),
      { numRuns: 200 },
    );
  });

  test('predictors far out, and rows without weight, give what the twin gives', () => {
    const ends = [745, 746, 709, 300, 301, 37, 1e-300, 1e9, 1e308, Number.MAX_VALUE].flatMap((end) => [
      end,
      -end,
    ]);
    const x = Float64Array.from([0, ...ends]);
    for (const form of LOSSES) {
      const loss = lossOf(form);
      for (const weights of [null, x.map((_, at) => at % 2)]) {
        const rows = {
          rowCount: x.length,
          p: 1,
          x,
          y: x.map((_, at) => at % 2),
          weights,
          offset: null,
          rowCountTotal: 3,
        };
        const answers = [opened({ n: 30, p: 1, skew: 0 }), plainKernel].map((kernel) => {
          const state = { eta: new Float64Array(x.length), slopes: new Float64Array(x.length) };
          const gradient = new Float64Array(1);
          const [pass] = kernel.passes(rows, loss, [{ theta: Float64Array.of(1), state, gradient }]);
          const bends = kernel.curvatures(rows, loss, state.eta);
          return { rowwise: [...state.slopes, ...bends], sums: [pass.value, pass.magnitude, ...gradient] };
        });
        const [got, want] = answers;
        close(got.rowwise, want.rowwise, (at) => 10 * Math.abs(want.rowwise[at]) + 1e-310);
        close(got.sums, want.sums, (at) => 100 * Math.max(Math.abs(want.sums[at]), want.sums[1]));
      }
    }
  });

  test('several points in one pass have the bits of one point after the other', () => {
    fc.assert(
      fc.property(anyCase, fc.integer({ min: 2, max: 11 }), (given, count) => {
        const kernel = opened(given);
        const { mine, random } = made(given, kernel);
        const loss = lossOf(given.loss);
        const point = (k: number, theta: Float64Array) => ({
          theta,
          state: { eta: new Float64Array(given.n), slopes: new Float64Array(given.n) },
          gradient: k % 3 === 0 ? null : new Float64Array(given.p),
        });
        const thetas = Array.from({ length: count }, () => normals(random, given.p));
        const together = thetas.map((theta, k) => point(k, theta));
        const alone = thetas.map((theta, k) => point(k, theta));
        const values = kernel.passes(mine, loss, together);
        expect(values).toEqual(alone.flatMap((one) => kernel.passes(mine, loss, [one])));
        expect(together).toEqual(alone);
      }),
      { numRuns: 60 },
    );
  });

  test('where the rows lie changes no bit', () => {
    fc.assert(
      fc.property(anyCase, (given) => {
        const kernel = opened(given);
        const [inside, outside] = [true, false].map((where) => made({ ...given, inside: where }, kernel));
        const answers = [inside, outside].map(({ mine, theta }) => {
          const state = { eta: new Float64Array(given.n), slopes: new Float64Array(given.n) };
          const gradient = new Float64Array(given.p);
          const value = kernel.passes(mine, lossOf(given.loss), [{ theta, state, gradient }]);
          return [value, state, gradient, kernel.weightedGram(mine.x, given.n, given.p, mine.weights, 1)];
        });
        expect(answers[0]).toEqual(answers[1]);
      }),
      { numRuns: 60 },
    );
  });

  test('a Cholesky factor solves what the twin solves, also after others took its place', () => {
    fc.assert(
      fc.property(fc.constantFrom(...COLUMNS, 100), fc.integer({ min: 1, max: 1e9 }), (p, seed) => {
        const random = seededRandom(seed);
        const kernel = variant.open({ columns: p, numbers: 0 });
        const definite = (): Float64Array => {
          const a = plainKernel.weightedGram(normals(random, 2 * p * p), 2 * p, p, null, 1);
          for (let j = 0; j < p; j++) a[j * p + j] += p;
          return a;
        };
        const [a, b] = [definite(), normals(random, p)];
        const first = kernel.factorise(a, p);
        const solved = first?.solve(b) ?? new Float64Array();
        close(solved, plainKernel.factorise(a, p)?.solve(b) ?? [], () => 10 / p);
        const second = kernel.factorise(definite(), p);
        second?.solve(b);
        kernel.weightedGram(normals(random, p), 1, p, null, 1);
        expect(first?.solve(b)).toEqual(solved);
        a[p * p - 1] = -1;
        expect(kernel.factorise(a, p)).toBeNull();
        a[0] = Number.NaN;
        expect(kernel.factorise(a, p)).toBeNull();
      }),
      { numRuns: 60 },
    );
  });

  test('the triangular factor is that of the twin', () => {
    fc.assert(
      fc.property(anyCase, ({ seed, n, p }) => {
        const random = seededRandom(seed);
        const kernel = variant.open({ columns: p, numbers: 0 });
        const rows = normals(random, n * p);
        const [got, want] = [kernel, plainKernel].map((each) => {
          const accumulator = each.factorAccumulator(p);
          for (let from = 0; from < n; from += 256) {
            const to = Math.min(n, from + 256);
            accumulator.append(rows.subarray(from * p, to * p), to - from);
          }
          return accumulator.packed();
        });
        // RᵀR = XᵀX is what is determined where there are fewer rows than columns
        const product = (packed: Float64Array): Float64Array => {
          const out = new Float64Array(p * p);
          const at = (i: number, j: number): number => (i <= j ? packed[(j * (j + 1)) / 2 + i] : 0);
          for (let i = 0; i < p; i++)
            for (let j = 0; j < p; j++) for (let k = 0; k <= i; k++) out[i * p + j] += at(k, i) * at(k, j);
          return out;
        };
        close(product(got), product(want), () => 10 * (n + 1));
      }),
      { numRuns: 60 },
    );
  });
});

describe('elementary functions', () => {
  const memory = new WebAssembly.Memory({ initial: 64, maximum: 64, shared: true });
  const VALUES = 65_536;
  const OUT = 2_000_000;
  const at = (
    code: KernelExports,
    name: 'exponentials' | 'logarithms',
    values: readonly number[],
  ): number[] => {
    const even = values.length + (values.length % 2);
    const all = new Float64Array(memory.buffer);
    all.set(values, VALUES / 8);
    code[name](VALUES, even, OUT);
    return [...all.subarray(OUT / 8, OUT / 8 + values.length)];
  };
  /** Distance in units of the last place of the reference. */
  const ulps = (got: number, want: number): number => {
    if (Object.is(got, want)) return 0;
    const next = 2 ** Math.max(-1074, Math.floor(Math.log2(Math.abs(want))) - 52);
    return Math.abs(got - want) / next;
  };
  const codes = modules.map(([name, module]) => [name, instantiate(module, memory)] as const);

  test.each(codes)('%s: exp and log1p keep within two units of the last place', (_name, code) => {
    const random = seededRandom(5);
    const ends = [0, -0, 1, -1, 5e-324, -745.2, -745, -744.4, -708.4, -708.3, 709.7, 300];
    const exponents = [...ends, ...Array.from({ length: 20_000 }, () => 1450 * random.uniform() - 745)];
    const powers = at(code, 'exponentials', exponents);
    for (const [k, value] of exponents.entries())
      expect(ulps(powers[k], Math.exp(Math.min(value, 709.7))), `exp(${value})`).toBeLessThanOrEqual(
        value > 709.7 ? Number.POSITIVE_INFINITY : 2,
      );
    const shares = [
      0,
      1,
      5e-324,
      1e-300,
      1e-16,
      Math.SQRT2 - 1,
      ...Array.from({ length: 20_000 }, () => Math.exp(-40 * random.uniform())),
    ];
    const logarithms = at(code, 'logarithms', shares);
    for (const [k, value] of shares.entries())
      expect(ulps(logarithms[k], Math.log1p(value)), `log1p(${value})`).toBeLessThanOrEqual(2);
  });

  test.each(codes)('%s: exp of what is not finite, or far out', (_name, code) => {
    const { POSITIVE_INFINITY: inf, NaN: nan } = Number;
    expect(at(code, 'exponentials', [inf, -inf, nan, 1e308, -1e308, 710])).toEqual([
      inf,
      0,
      nan,
      inf,
      0,
      inf,
    ]);
    expect(at(code, 'logarithms', [nan])).toEqual([nan]);
  });
});

describe.each(variants.map((variant) => [variant.name, variant] as const))(
  'a site on %s',
  (_name, variant) => {
    const raw = (random: Random, rowCount: number, width: number, loss: LossForm): RawShard => ({
      rowCount,
      rowsDropped: 0,
      columns: Array.from({ length: width }, (_, j) => `x${j}`),
      rows: new RawDenseRows(normals(random, rowCount * width), width, rowCount),
      y: Float64Array.from({ length: rowCount }, () =>
        loss.kind === 'logistic'
          ? random.integer(2)
          : loss.kind === 'poisson'
            ? random.poisson(2)
            : random.normal(),
      ),
      weights: Float64Array.from({ length: rowCount }, () => random.integer(3)),
      offset: normals(random, rowCount).map((value) => value / 4),
      folds: { labels: ['1', '2', '3'], starts: [0, 5, 30, rowCount] },
      clusters: null,
      margins: null,
    });
    const scalingOf = (width: number, rowCount: number): Scaling => ({
      rowCountTotal: rowCount + 40,
      kept: Array.from({ length: width }, (_, j) => j),
      center: new Float64Array(width),
      scale: new Float64Array(width).fill(1),
    });

    test.each(LOSSES)('answers what the plain kernel answers: $kind', (form) => {
      const random = seededRandom(11);
      for (const [rowCount, width] of [
        [700, 9],
        [60, 4],
        [40, 100],
      ] as const) {
        const design = raw(random, rowCount, width, form);
        const p = width + 1;
        const point = normals(random, p).map((value) => value / p);
        const diagonal = new Float64Array(p).fill(1);
        const directions = normals(random, 2 * p);
        for (const part of [
          null,
          { fold: '2', side: 'training' },
          { fold: '3', side: 'held-out' },
        ] as const) {
          const [got, want] = [variant, plainVariant].map((each) => {
            const shards = scaleParts(design, scalingOf(width, rowCount), true, each);
            const solver = localSolver(shards(part), lossOf(form));
            const at = must(solver.evaluate(point, 'curvature'));
            const { start, end } = must(
              solver.joint(
                point,
                { curvature: packSymmetric(identity(p), p), linear: point },
                new Float64Array(p).fill(0.01),
                diagonal,
              ),
            );
            const none = new Float64Array();
            return [
              Float64Array.of(at.value),
              at.gradient ?? none,
              at.diagonal ?? none,
              at.curvature ?? none,
              must(solver.proximal(point, 0.1, diagonal, point)).point,
              must(solver.sketch(point, directions, 2)),
              start.curvature,
              end.gradient,
            ];
          });
          want.forEach((numbers, k) => {
            const most = numbers.reduce((a: number, value) => Math.max(a, Math.abs(value)), 0.01);
            for (let at = 0; at < numbers.length; at++)
              expect(Math.abs(got[k][at] - numbers[at]), `answer ${k}`).toBeLessThanOrEqual(1e-11 * most);
          });
        }
      }
    });
  },
);

function identity(p: number): Float64Array {
  const out = new Float64Array(p * p);
  for (let j = 0; j < p; j++) out[j * p + j] = 1;
  return out;
}
