import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { plainVariant } from '../../numerics/kernels/plain.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import { dot } from '../../numerics/vector.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import type { Entries } from '../../worker/design/entries.js';
import { RawSparseRows } from '../../worker/design/raw-sparse-rows.js';
import type { RawRows } from '../../worker/design/rows.js';
import type { Shard } from '../../worker/design/shard.js';
import { gradientSystem } from '../../worker/local/gradient-system.js';
import { type LocalSolver, localSolver } from '../../worker/local/local-solver.js';
import { ownInterceptSolver } from '../../worker/local/own-intercept.js';
import { rowCurvatures, rowPass, rowState } from '../../worker/local/row-pass.js';
import { lossOf } from '../../worker/losses/index.js';
import { must } from '../support/method-driver.js';

const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 0.7 },
];

interface Scene {
  readonly seed: number;
  readonly rowCount: number;
  readonly p: number;
  readonly loss: LossForm;
  readonly intercept: boolean;
  readonly centred: boolean;
}

const scenes: fc.Arbitrary<Scene> = fc.record({
  seed: fc.integer({ min: 1, max: 1e9 }),
  rowCount: fc.integer({ min: 1, max: 30 }),
  p: fc.integer({ min: 2, max: 40 }),
  loss: fc.constantFrom(...LOSSES),
  intercept: fc.boolean(),
  centred: fc.boolean(),
});

const normals = (random: Random, n: number, spread = 1): Float64Array =>
  Float64Array.from({ length: n }, () => spread * random.normal());

/** Three entries a row, among the columns of the first half more often: some columns have none. */
function sparseEntries(rowCount: number, p: number, each: number, random: Random): Entries {
  const rows = Array.from({ length: rowCount }, () =>
    [...new Set(Array.from({ length: each }, () => Math.floor(p * random.uniform() ** 2)))].sort(
      (a, b) => a - b,
    ),
  );
  const starts = [0];
  for (const row of rows) starts.push(starts[starts.length - 1] + row.length);
  const columns = Int32Array.from(rows.flat());
  const values = columns.map(() => 1);
  return { rowCount, starts: Int32Array.from(starts), columns, values: Float64Array.from(values) };
}

/** The same rows by their entries and in full, scaled as if other sites had rows of the columns that have none here. */
function shards(scene: Scene, each: number): { sparse: Shard; dense: Shard; random: Random } {
  const { rowCount, p, loss, intercept, centred } = scene;
  const random = seededRandom(scene.seed);
  const raw = new RawSparseRows(sparseEntries(rowCount, p, each, random), p);
  const x = new Float64Array(rowCount * p);
  raw.copy(0, rowCount, x);
  const scaling: Scaling = {
    rowCountTotal: 4 * rowCount,
    kept: Array.from({ length: p }, (_, j) => j),
    center: Float64Array.from({ length: p }, () => (centred ? 0.05 + 0.2 * random.uniform() : 0)),
    scale: Float64Array.from({ length: p }, () => 0.2 + 0.5 * random.uniform()),
  };
  const counts = loss.kind === 'logistic' || loss.kind === 'poisson';
  const y = Float64Array.from({ length: rowCount }, () => (counts ? random.integer(2) : random.normal()));
  const weights = Float64Array.from({ length: rowCount }, () => random.integer(4) * random.uniform());
  const offset = normals(random, rowCount, 0.3);
  const made = (rows: RawRows): Shard => {
    const scaled = rows.scaled(scaling, intercept, rowCount, plainVariant);
    return { rowCount, p: scaled.p, rows: scaled, y, weights, offset, rowCountTotal: 4 * rowCount };
  };
  return { sparse: made(raw), dense: made(new RawDenseRows(x, p, rowCount)), random };
}

const largest = (values: Float64Array): number => values.reduce((most, v) => Math.max(most, Math.abs(v)), 1);

function expectNear(got: Float64Array, wanted: Float64Array, tolerance: number): void {
  expect(got.length).toBe(wanted.length);
  const size = largest(wanted);
  for (let j = 0; j < wanted.length; j++)
    expect(Math.abs(got[j] - wanted[j]), `entry ${j}`).toBeLessThanOrEqual(tolerance * size);
}

describe('local solvers on rows by their entries', () => {
  test('answer as on the same rows in full, idle columns included', () => {
    let idle = 0;
    fc.assert(
      fc.property(scenes, fc.boolean(), (scene, own) => {
        const { sparse, dense, random } = shards(scene, 3);
        if (sparse.rows.occupied?.() !== null) idle++;
        const loss = lossOf(scene.loss);
        const solver = (shard: Shard): LocalSolver =>
          own && scene.intercept ? ownInterceptSolver(shard, loss) : localSolver(shard, loss);
        const p = dense.p - (own && scene.intercept ? 1 : 0);
        const [center, start] = [normals(random, p, 0.5), normals(random, p, 0.3)];
        const diagonal = Float64Array.from({ length: p }, () => 0.05 + random.uniform());
        const [got, wanted] = [sparse, dense].map(
          (shard) => must(solver(shard).proximal(center, 0.3, diagonal, start)).point,
        );
        expectNear(got, wanted, 1e-8);
        const [a, b] = [sparse, dense].map((shard) => must(solver(shard).evaluate(center, 'curvature')));
        expect(Math.abs(a.value - b.value)).toBeLessThanOrEqual(1e-11 * (1 + Math.abs(b.value)));
        for (const part of ['gradient', 'diagonal', 'curvature'] as const)
          expectNear(a[part] ?? new Float64Array(0), b[part] ?? new Float64Array(0), 1e-10);
        const [s, t] = [sparse, dense].map((shard) => must(solver(shard).sketch(center, start, 1)));
        expectNear(s, t, 1e-10);
      }),
      { numRuns: 200 },
    );
    expect(idle).toBeGreaterThan(20);
  });
});

describe('steps by conjugate gradients', () => {
  test('leave a tenth of the gradient at most, by the diagonal of the matrix, and are steps of descent', () => {
    fc.assert(
      fc.property(scenes, (scene) => {
        const { dense, random } = shards(scene, 3);
        const { p } = dense;
        const loss = lossOf(scene.loss);
        const metric = Float64Array.from({ length: p }, () => 0.05 + random.uniform());
        const x = normals(random, p, 0.3);
        const rows = rowState(dense.rowCount);
        const gradient = new Float64Array(p);
        // at its own centre the proximal term has no slope
        const { magnitude } = rowPass(dense, loss, x, rows, gradient);
        const curvatures = rowCurvatures(dense, loss, rows.eta);
        const system = gradientSystem(dense, metric);
        expect(system.refresh(curvatures)).toBe(true);
        const step = system.step({ x, rows, gradient, magnitude });
        const matrix = dense.rows.gram(curvatures, 1);
        for (let j = 0; j < p; j++) matrix[j * p + j] += metric[j];
        let [left, all] = [0, 0];
        for (let i = 0; i < p; i++) {
          const residual = gradient[i] + dot(matrix.subarray(i * p, (i + 1) * p), step);
          left += residual ** 2 / matrix[i * p + i];
          all += gradient[i] ** 2 / matrix[i * p + i];
        }
        expect(Math.sqrt(left)).toBeLessThanOrEqual(0.1001 * Math.sqrt(all));
        expect(-dot(gradient, step)).toBeGreaterThanOrEqual(0);
      }),
      { numRuns: 150 },
    );
  });

  for (const loss of LOSSES)
    test(`lead to the proximal point of many rows and columns: ${loss.kind}`, () => {
      const scene = { seed: 9, rowCount: 1100, p: 2300, loss, intercept: true, centred: true };
      const { sparse, dense, random } = shards(scene, 6);
      const [center, start] = [normals(random, dense.p, 0.05), normals(random, dense.p, 0.05)];
      const diagonal = Float64Array.from({ length: dense.p }, () => 0.1 + random.uniform());
      for (const shard of [sparse, dense]) {
        const solver = localSolver(shard, lossOf(loss));
        const { point, newtonSteps } = must(solver.proximal(center, 0.1, diagonal, start));
        expect(newtonSteps).toBeGreaterThan(1);
        expect(must(solver.proximal(center, 0.1, diagonal, start)).point).toEqual(point);
        // ∇φ + M (x − center), by the metric: of the end beside that of the start
        const slope = (at: Float64Array): number => {
          const gradient = must(solver.evaluate(at, 'gradient')).gradient ?? new Float64Array(0);
          let sum = 0;
          for (let j = 0; j < at.length; j++)
            sum += (gradient[j] + 0.1 * diagonal[j] * (at[j] - center[j])) ** 2 / (0.1 * diagonal[j]);
          return Math.sqrt(sum);
        };
        expect(slope(point)).toBeLessThanOrEqual(1e-3 * slope(start));
      }
    });
});
