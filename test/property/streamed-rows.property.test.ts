import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import type { KernelVariant } from '../../numerics/kernels/kernel.js';
import { plainVariant } from '../../numerics/kernels/plain.js';
import { seededRandom } from '../../numerics/random.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import { RawStreamedRows } from '../../worker/design/raw-streamed-rows.js';
import type { DesignRows, RowData } from '../../worker/design/rows.js';
import type { RowReader } from '../../worker/design/streamed-rows.js';
import { lossOf } from '../../worker/losses/index.js';
import { compiledKernels } from '../support/kernels.js';

/** Rows read in windows against the same rows in memory. */
const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 0.7 },
];
const VARIANTS: readonly KernelVariant[] = [plainVariant, ...(await compiledKernels())];

interface Case {
  readonly seed: number;
  readonly rowCount: number;
  readonly width: number;
  /** Rows of a window. */
  readonly windowMost: number;
  readonly kept: readonly number[];
  readonly intercept: boolean;
  readonly variant: KernelVariant;
  readonly loss: LossForm;
  readonly weighted: boolean;
  readonly shifted: boolean;
  /** How far the columns are from zero. */
  readonly away: number;
  /** Shares of the rows at which a stretch begins and ends; past 1 it goes on at the start. */
  readonly from: number;
  readonly length: number;
}

const anyCase: fc.Arbitrary<Case> = fc.integer({ min: 1, max: 9 }).chain((width) =>
  fc.record({
    seed: fc.integer({ min: 1, max: 1e9 }),
    rowCount: fc.oneof(fc.integer({ min: 1, max: 40 }), fc.constantFrom(64, 127, 257, 300)),
    width: fc.constant(width),
    windowMost: fc.oneof(fc.integer({ min: 1, max: 9 }), fc.constantFrom(63, 64, 65, 128, 1024)),
    kept: fc.subarray([...Array(width).keys()]),
    intercept: fc.boolean(),
    variant: fc.constantFrom(...VARIANTS),
    loss: fc.constantFrom(...LOSSES),
    weighted: fc.boolean(),
    shifted: fc.boolean(),
    away: fc.constantFrom(0, 1, 1e6),
    from: fc.double({ min: 0, max: 1, noNaN: true }),
    length: fc.double({ min: 0, max: 1, noNaN: true }),
  }),
);

const readerOf = (x: Float64Array, width: number, rowCount: number): RowReader => ({
  rowCount,
  width,
  read: (from, to, out) => {
    if (!(0 <= from && from <= to && to <= rowCount)) throw new RangeError(`rows ${from} to ${to}`);
    out.set(x.subarray(from * width, to * width));
  },
});

function drawn({ seed, rowCount, width, away }: Case): {
  x: Float64Array;
  some: (count: number) => Float64Array;
} {
  const random = seededRandom(seed);
  const some = (count: number): Float64Array => Float64Array.from({ length: count }, () => random.normal());
  return { x: some(rowCount * width).map((value) => away + value), some };
}

/** Largest difference, relative to the largest number of either. */
function expectClose(found: Float64Array, wanted: Float64Array, size = 0): void {
  expect(found.length).toBe(wanted.length);
  let scale = size;
  let most = 0;
  for (let i = 0; i < wanted.length; i++) {
    scale = Math.max(scale, Math.abs(wanted[i]));
    most = Math.max(most, Math.abs(found[i] - wanted[i]));
  }
  expect(most).toBeLessThanOrEqual(1e-13 * Math.max(scale, Number.MIN_VALUE));
}

const given = (
  one: Case,
): { streamed: RawStreamedRows; dense: RawDenseRows; some: (count: number) => Float64Array } => {
  const { x, some } = drawn(one);
  const { rowCount, width, windowMost } = one;
  return {
    streamed: new RawStreamedRows(readerOf(x.slice(), width, rowCount), windowMost),
    dense: new RawDenseRows(x, width, rowCount),
    some,
  };
};

describe('design columns that are read in windows', () => {
  test('have the moments and sums of those in memory, to the bit', () => {
    fc.assert(
      fc.property(anyCase, (one) => {
        const { streamed, dense, some } = given(one);
        const from = Math.floor(one.from * (one.rowCount - 1));
        const to = Math.min(one.rowCount, from + 1 + Math.floor(one.length * one.rowCount));
        expect(streamed.moments(from, to)).toEqual(dense.moments(from, to));
        const weights = one.weighted ? some(one.rowCount).map(Math.abs) : null;
        expect(streamed.weightedSum(weights)).toEqual(dense.weightedSum(weights));
        const [a, b] = [0, 1].map(() => new Float64Array((to - from) * one.width));
        streamed.copy(from, to, a);
        dense.copy(from, to, b);
        expect(a).toEqual(b);
      }),
    );
  });

  test('are reordered as those in memory', () => {
    fc.assert(
      fc.property(anyCase, (one) => {
        const { streamed, dense } = given(one);
        const random = seededRandom(one.seed);
        const keys = Float64Array.from({ length: one.rowCount }, () => random.normal());
        const order = Int32Array.from([...keys.keys()].sort((a, b) => keys[a] - keys[b]));
        const [a, b] = [0, 1].map(() => new Float64Array(one.rowCount * one.width));
        streamed.reordered(order).copy(0, one.rowCount, a);
        dense.reordered(order).copy(0, one.rowCount, b);
        expect(a).toEqual(b);
      }),
    );
  });
});

describe('solver columns that are read in windows', () => {
  test('are those in memory to the bit, whichever stretch and columns', () => {
    fc.assert(
      fc.property(anyCase, (one) => {
        const { streamed, dense, rowCount } = scaledBoth(one);
        const [a, b] = [streamed, dense].map((rows) => {
          const all = new Float64Array(rowCount * rows.p);
          rows.copy(0, rowCount, all);
          return all;
        });
        expect(a).toEqual(b);
        const turned = [...Array(dense.p).keys()].reverse().filter((j) => j % 3 !== 1);
        const [c, d] = [streamed, dense].map((rows) => {
          const half = rows.columns(turned);
          const all = new Float64Array(rowCount * turned.length);
          half.copy(0, rowCount, all);
          rows.copy(0, rowCount, new Float64Array(rowCount * rows.p));
          half.copy(0, rowCount, all);
          return all;
        });
        expect(c).toEqual(d);
      }),
    );
  });

  test('have the products and sums of those in memory', () => {
    fc.assert(
      fc.property(anyCase, (one) => {
        const { streamed, dense, rowCount, some } = scaledBoth(one);
        const { p } = dense;
        const from = Math.floor(one.length * rowCount);
        const to = from + Math.floor(one.from * (rowCount - from));
        const [theta, weights, before] = [some(p), some(rowCount).map(Math.abs), some(p)];
        const of = (take: (rows: DesignRows) => Float64Array): [Float64Array, Float64Array] => [
          take(streamed),
          take(dense),
        ];
        const products = of((rows) =>
          filled(new Float64Array(to - from), (out) => rows.products(from, to, theta, out)),
        );
        expect(products[0]).toEqual(products[1]);
        const addTo = (add: 'addWeighted' | 'addWeightedSquares') =>
          of((rows) => filled(before.slice(), (out) => rows[add](from, to, weights, out)));
        const terms = to - from + 1;
        expectClose(...addTo('addWeighted'), terms);
        expectClose(...addTo('addWeightedSquares'), terms);
        expectClose(...of((rows) => rows.gram(null, 0.5)));
        expectClose(...of((rows) => rows.gram(weights, 2)));
        expectClose(...of((rows) => rows.crossProducts(theta.map(Math.abs))));
      }),
    );
  });

  test('have the values, predictors, slopes and gradients of those in memory', () => {
    fc.assert(
      fc.property(anyCase, (one) => {
        const { streamed, dense, rowCount, some } = scaledBoth(one);
        const { p } = dense;
        const data = dataOf(one, rowCount, some);
        const thetas = [some(p), some(p), some(p)].map((theta) => theta.map((value) => value / (1 + p)));
        const [a, b] = [streamed, dense].map((rows) => {
          const points = thetas.map((theta, k) => ({
            theta,
            state: k === 1 ? null : { eta: new Float64Array(rowCount), slopes: new Float64Array(rowCount) },
            gradient: k === 2 ? null : new Float64Array(p).fill(Number.NaN),
          }));
          return { points, values: rows.passes(data, lossOf(one.loss), points) };
        });
        thetas.forEach((_, k) => {
          expect(a.points[k].state).toEqual(b.points[k].state);
          expectClose(
            Float64Array.of(a.values[k].value),
            Float64Array.of(b.values[k].value),
            b.values[k].magnitude,
          );
          expectClose(Float64Array.of(a.values[k].magnitude), Float64Array.of(b.values[k].magnitude));
          const [found, wanted] = [a.points[k].gradient, b.points[k].gradient];
          if (found !== null && wanted !== null) expectClose(found, wanted, rowCount / data.rowCountTotal);
        });
      }),
    );
  });
});

/** Both kinds of rows as solver columns, a stretch of the ring that they make. */
function scaledBoth(one: Case): {
  streamed: DesignRows;
  dense: DesignRows;
  rowCount: number;
  some: (count: number) => Float64Array;
} {
  const { streamed, dense, some } = given(one);
  const { kept, away } = one;
  const scaling: Scaling = {
    rowCountTotal: 2 * one.rowCount,
    kept: [...kept],
    center: some(kept.length).map((value) => away + value),
    scale: some(kept.length).map((value) => 0.5 + Math.abs(value)),
  };
  const ring = one.rowCount + Math.floor(one.from * one.rowCount);
  const from = ring - one.rowCount;
  const to = from + Math.ceil(one.length * one.rowCount);
  const views = [streamed, dense].map(
    (raw): DesignRows => raw.scaled(scaling, one.intercept, ring, one.variant).stretch(from, to),
  );
  return { streamed: views[0], dense: views[1], rowCount: to - from, some };
}

function dataOf(one: Case, rowCount: number, some: (count: number) => Float64Array): RowData {
  const binary = one.loss.kind === 'logistic';
  return {
    y: some(rowCount).map((value) => (binary ? Number(value > 0) : Math.abs(Math.round(value)))),
    weights: one.weighted ? some(rowCount).map(Math.abs) : null,
    offset: one.shifted ? some(rowCount) : null,
    rowCountTotal: 2 * one.rowCount,
  };
}

function filled(out: Float64Array, fill: (out: Float64Array) => void): Float64Array {
  fill(out);
  return out;
}
