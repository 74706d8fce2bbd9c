import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { plainVariant } from '../../numerics/kernels/plain.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import type { Entries } from '../../worker/design/entries.js';
import { RawSparseRows } from '../../worker/design/raw-sparse-rows.js';
import type { DesignRows, RawRows } from '../../worker/design/rows.js';
import { lossOf } from '../../worker/losses/index.js';
import { compiledKernels } from '../support/kernels.js';

const kernels = await compiledKernels();

interface Scene {
  readonly seed: number;
  readonly rowCount: number;
  readonly p: number;
  readonly density: number;
  readonly intercept: boolean;
  readonly ring: number;
}

const scenes: fc.Arbitrary<Scene> = fc.record({
  seed: fc.integer({ min: 1, max: 1e9 }),
  rowCount: fc.integer({ min: 1, max: 40 }),
  p: fc.integer({ min: 1, max: 30 }),
  density: fc.constantFrom(0, 0.05, 0.3, 1),
  intercept: fc.boolean(),
  ring: fc.double({ min: 0, max: 0.99, noNaN: true }),
});

/** Rows without entries, columns without, columns with one in every row, columns that are constant, listed zeros. */
function entriesOf({ rowCount, p, density }: Scene, random: Random): Entries {
  const starts = [0];
  const columns: number[] = [];
  const values: number[] = [];
  const kinds = Array.from({ length: p }, () => random.integer(6));
  for (let row = 0; row < rowCount; row++) {
    for (let j = 0; j < p; j++) {
      if (kinds[j] === 0 || (kinds[j] > 2 && random.uniform() >= density)) continue;
      columns.push(j);
      values.push(kinds[j] === 1 ? 7.25 : random.integer(8) === 0 ? 0 : 10 * random.normal());
    }
    starts.push(columns.length);
  }
  return {
    rowCount,
    starts: Int32Array.from(starts),
    columns: Int32Array.from(columns),
    values: Float64Array.from(values),
  };
}

const largest = (values: Float64Array): number => values.reduce((most, v) => Math.max(most, Math.abs(v)), 1);

function expectNear(got: Float64Array, wanted: Float64Array, tolerance = 1e-12): void {
  expect(got.length).toBe(wanted.length);
  const size = largest(wanted);
  for (let j = 0; j < wanted.length; j++)
    expect(Math.abs(got[j] - wanted[j]), `entry ${j}`).toBeLessThanOrEqual(tolerance * size);
}

const normals = (random: Random, n: number): Float64Array =>
  Float64Array.from({ length: n }, () => random.normal());
const someZero = (random: Random, n: number): Float64Array =>
  Float64Array.from({ length: n }, () => (random.integer(4) === 0 ? 0 : random.uniform()));

/** The same design twice: by its entries, and written in full. */
function twins(scene: Scene, random: Random): { sparse: RawSparseRows; dense: RawDenseRows } {
  const sparse = new RawSparseRows(entriesOf(scene, random), scene.p);
  const x = new Float64Array(scene.rowCount * scene.p);
  sparse.copy(0, scene.rowCount, x);
  return { sparse, dense: new RawDenseRows(x, scene.p, scene.rowCount) };
}

function scaledTwins(scene: Scene, random: Random): { sparse: DesignRows; dense: DesignRows } {
  const { sparse, dense } = twins(scene, random);
  const { mean, centredSquares } = dense.moments(0, scene.rowCount);
  const kept = [...mean.keys()].filter(() => random.integer(5) > 0);
  const scaling: Scaling = {
    rowCountTotal: 3 * scene.rowCount,
    kept,
    center: Float64Array.from(kept, (j) => (scene.intercept ? mean[j] + 0.1 * random.normal() : 0)),
    scale: Float64Array.from(kept, (j) => Math.sqrt(centredSquares[j] / scene.rowCount) + 0.1),
  };
  const ringRows = scene.rowCount + Math.floor(scene.ring * scene.rowCount);
  const made = (raw: RawRows): DesignRows => raw.scaled(scaling, scene.intercept, ringRows, plainVariant);
  return { sparse: made(sparse), dense: made(dense) };
}

/** Some stretch of the ring with as many rows as there are at most, as parts of a shard have. */
function stretchOf(rows: DesignRows, from: number, count: number): DesignRows {
  return rows.stretch(from, from + count);
}

const inScaled = (
  look: (sparse: DesignRows, dense: DesignRows, random: Random, scene: Scene) => void,
): void =>
  fc.assert(
    fc.property(scenes, (scene) => {
      const random = seededRandom(scene.seed);
      const whole = scaledTwins(scene, random);
      const from = random.integer(whole.dense.rowCount);
      const count = random.integer(Math.min(scene.rowCount, whole.dense.rowCount - from) + 1);
      look(whole.sparse, whole.dense, random, scene);
      look(stretchOf(whole.sparse, from, count), stretchOf(whole.dense, from, count), random, scene);
    }),
    { numRuns: 150 },
  );

describe('design columns by their entries', () => {
  test('have the moments, sums and rows of the columns in full', () => {
    fc.assert(
      fc.property(scenes, (scene) => {
        const random = seededRandom(scene.seed);
        const { sparse, dense } = twins(scene, random);
        const from = random.integer(scene.rowCount);
        const to = from + 1 + random.integer(scene.rowCount - from);
        const [got, wanted] = [sparse.moments(from, to), dense.moments(from, to)];
        expectNear(got.mean, wanted.mean, 1e-14);
        expectNear(got.centredSquares, wanted.centredSquares, 1e-14);
        expect(got.constant).toEqual(wanted.constant);
        for (const weights of [null, someZero(random, scene.rowCount)])
          expectNear(sparse.weightedSum(weights), dense.weightedSum(weights), 1e-14);
        const order = Int32Array.from({ length: scene.rowCount }, (_, r) => r);
        for (let r = order.length - 1; r > 0; r--) {
          const other = random.integer(r + 1);
          [order[r], order[other]] = [order[other], order[r]];
        }
        const [a, b] = [sparse, dense].map((raw) => {
          const x = new Float64Array((to - from) * scene.p);
          raw.reordered(order).copy(from, to, x);
          return x;
        });
        expect(a).toEqual(b);
      }),
      { numRuns: 200 },
    );
  });

  test('a column that is the same everywhere has no spread, near zero as far from it', () => {
    const columns = { starts: Int32Array.of(0, 1, 2, 3), columns: Int32Array.of(0, 0, 0) };
    const raw = new RawSparseRows({ rowCount: 3, ...columns, values: Float64Array.of(0.1, 0.1, 0.1) }, 2);
    expect(raw.moments(0, 3)).toEqual({
      mean: Float64Array.of(0.1, 0),
      centredSquares: Float64Array.of(0, 0),
      constant: [true, true],
    });
  });
});

describe('solver columns by their entries', () => {
  test('have the products and weighted sums of the columns in full', () => {
    inScaled((sparse, dense, random) => {
      expect([sparse.rowCount, sparse.p]).toEqual([dense.rowCount, dense.p]);
      const from = random.integer(dense.rowCount + 1);
      const to = from + random.integer(dense.rowCount - from + 1);
      const theta = normals(random, dense.p);
      const weights = someZero(random, to - from);
      const sums = (rows: DesignRows): Float64Array[] => {
        const products = new Float64Array(to - from);
        rows.products(from, to, theta, products);
        const added = Float64Array.from(theta);
        rows.addWeighted(from, to, weights, added);
        const squares = Float64Array.from(theta);
        rows.addWeightedSquares(from, to, weights, squares);
        return [products, added, squares];
      };
      const wanted = sums(dense);
      sums(sparse).forEach((got, k) => {
        expectNear(got, wanted[k]);
      });
    });
  });

  test('have the matrices of the columns in full', () => {
    inScaled((sparse, dense, random) => {
      for (const weights of [null, someZero(random, dense.rowCount)])
        expectNear(sparse.gram(weights, 0.3), dense.gram(weights, 0.3));
      const inverse = Float64Array.from({ length: dense.p }, () => random.uniform());
      expectNear(sparse.crossProducts(inverse), dense.crossProducts(inverse));
    });
  });

  test('are written in full as those are, all of them or some', () => {
    inScaled((sparse, dense, random) => {
      const kept = [...Array(dense.p).keys()].filter(() => random.integer(3) > 0);
      const written = (rows: DesignRows): Float64Array => {
        const x = new Float64Array(rows.rowCount * rows.p);
        rows.copy(0, rows.rowCount, x);
        return x;
      };
      expectNear(written(sparse), written(dense), 1e-14);
      expectNear(written(sparse.columns(kept)), written(dense.columns(kept)), 1e-14);
    });
  });

  for (const kind of ['squared', 'logistic', 'poisson'] as const)
    test(`have the passes of the columns in full: ${kind}`, () => {
      inScaled((sparse, dense, random) => {
        const { rowCount, p } = dense;
        const data = {
          y: Float64Array.from({ length: rowCount }, () => random.integer(2)),
          weights: random.integer(2) === 0 ? null : someZero(random, rowCount),
          offset: random.integer(2) === 0 ? null : normals(random, rowCount),
          rowCountTotal: 2 * rowCount + 1,
        };
        const thetas = [0, 1, 2].map(() => normals(random, p).map((value) => 0.2 * value));
        const passed = (rows: DesignRows) => {
          const points = thetas.map((theta, k) => ({
            theta,
            state: k === 1 ? null : { eta: new Float64Array(rowCount), slopes: new Float64Array(rowCount) },
            gradient: k === 2 ? null : new Float64Array(p).fill(Number.NaN),
          }));
          const values = rows.passes(data, lossOf({ kind }), points);
          return [
            Float64Array.from(values.flatMap(({ value, magnitude }) => [value, magnitude])),
            ...points.flatMap(({ state, gradient }) => [state?.eta, state?.slopes, gradient]),
          ].map((values) => values ?? new Float64Array(0));
        };
        const wanted = passed(dense);
        passed(sparse).forEach((got, k) => {
          expectNear(got, wanted[k]);
        });
      });
    });

  test('set idle columns apart: the others, and ones for what the idle columns add up to', () => {
    let apart = 0;
    inScaled((sparse, dense, random, scene) => {
      const occupied = sparse.occupied?.() ?? null;
      if (occupied === null) return;
      apart++;
      const { columns, idle, rows, shifting } = occupied;
      expect([...columns, ...idle.columns].sort((a, b) => a - b)).toEqual([...Array(dense.p).keys()]);
      const theta = normals(random, dense.p);
      expect([rows.p, shifting]).toEqual([
        columns.length + (shifting ? 1 : 0),
        scene.intercept && idle.values.some((v) => v !== 0),
      ]);
      const own = new Float64Array(rows.p);
      columns.forEach((j, k) => {
        own[k] = theta[j];
      });
      idle.columns.forEach((j, i) => {
        if (shifting) own[columns.length] += idle.values[i] * theta[j];
      });
      const [got, wanted] = [new Float64Array(rows.rowCount), new Float64Array(rows.rowCount)];
      rows.products(0, rows.rowCount, own, got);
      dense.products(0, dense.rowCount, theta, wanted);
      expectNear(got, wanted);
    });
    expect(apart).toBeGreaterThan(50);
  });
});

describe('compiled kernels', () => {
  for (const variant of kernels)
    test(`pass over rows by their entries as the plain one does: ${variant.name}`, () => {
      const random = seededRandom(3);
      const rowCount = 5000;
      const scene = { seed: 3, rowCount, p: 40, density: 0.05, intercept: true, ring: 0 };
      const { sparse } = twins(scene, random);
      const scaling = {
        rowCountTotal: rowCount,
        kept: [...Array(40).keys()],
        center: normals(random, 40),
        scale: new Float64Array(40).fill(3),
      };
      const data = {
        y: Float64Array.from({ length: rowCount }, () => random.integer(2)),
        weights: someZero(random, rowCount),
        offset: normals(random, rowCount),
        rowCountTotal: rowCount,
      };
      const theta = normals(random, 41).map((value) => 0.05 * value);
      const [got, wanted] = [variant, plainVariant].map((of) => {
        const gradient = new Float64Array(41);
        const state = { eta: new Float64Array(rowCount), slopes: new Float64Array(rowCount) };
        const rows = sparse.scaled(scaling, true, rowCount, of);
        const [{ value }] = rows.passes(data, lossOf({ kind: 'logistic' }), [{ theta, state, gradient }]);
        return { value, gradient, eta: state.eta };
      });
      expect(Math.abs(got.value - wanted.value)).toBeLessThanOrEqual(1e-13);
      expect(got.eta).toEqual(wanted.eta);
      expectNear(got.gradient, wanted.gradient);
    });
});
