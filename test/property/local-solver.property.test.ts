import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { unpackSymmetric } from '../../numerics/packed.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import { mergeFactors, triangularFactor } from '../../numerics/triangular-factor.js';
import type { Checked } from '../../protocol/failure.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { denseShard } from '../../worker/design/dense-rows.js';
import type { Shard } from '../../worker/design/shard.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import type { Loss } from '../../worker/losses/loss.js';
import { entriesOf } from '../support/dense.js';

const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 0.7 },
];

interface Case {
  readonly seed: number;
  readonly rowCount: number;
  readonly p: number;
  readonly loss: LossForm;
  readonly weighted: boolean;
  readonly shifted: boolean;
}

const caseOf = (rows: [number, number], columns: [number, number]) =>
  fc.record({
    seed: fc.integer({ min: 1, max: 1e9 }),
    rowCount: fc.integer({ min: rows[0], max: rows[1] }),
    p: fc.integer({ min: columns[0], max: columns[1] }),
    loss: fc.constantFrom(...LOSSES),
    weighted: fc.boolean(),
    shifted: fc.boolean(),
  });
/** Rows well above, near and far below the columns; more rows than one block of the kernels too. */
const anyCase = fc.oneof(caseOf([1, 60], [1, 12]), caseOf([1, 10], [21, 40]), caseOf([250, 600], [1, 6]));

const normals = (random: Random, n: number, spread: number): Float64Array =>
  Float64Array.from({ length: n }, () => spread * random.normal());

function shardOf(given: Case, random: Random): Shard {
  const { rowCount, p, loss } = given;
  const x = normals(random, rowCount * p, 1);
  for (let r = 0; r < rowCount; r++) x[r * p] = 1;
  const weights = Float64Array.from({ length: rowCount }, () =>
    random.integer(5) === 0 ? 0 : 3 * random.uniform(),
  );
  const offset = normals(random, rowCount, 0.5);
  const truth = normals(random, p, 1 / Math.sqrt(p));
  const y = Float64Array.from({ length: rowCount }, (_, r) => {
    let eta = 0;
    for (let j = 0; j < p; j++) eta += x[r * p + j] * truth[j];
    if (loss.kind === 'squared' || loss.kind === 'huber') return eta + random.normal();
    return loss.kind === 'logistic'
      ? Number(random.uniform() < lossOf({ kind: 'logistic' }).mean(eta))
      : random.poisson(Math.exp(Math.min(eta, 4)));
  });
  return denseShard({
    rowCount,
    p,
    x,
    y,
    weights: given.weighted ? weights : null,
    offset: given.shifted ? offset : null,
    rowCountTotal: rowCount * (1 + random.integer(6)),
  });
}

/** φ, ∇φ, ∇²φ written as the formulas stand, with the sums of absolute terms that rounding is measured against. */
function naive(shard: Shard, loss: Loss, theta: Float64Array) {
  const { p, rowCount, y, rowCountTotal } = shard;
  const x = entriesOf(shard);
  let value = 0;
  let valueSize = 0;
  const gradient = new Float64Array(p);
  const gradientSize = new Float64Array(p);
  const curvature = new Float64Array(p * p);
  for (let r = 0; r < rowCount; r++) {
    const weight = (shard.weights?.[r] ?? 1) / rowCountTotal;
    let eta = shard.offset?.[r] ?? 0;
    for (let j = 0; j < p; j++) eta += x[r * p + j] * theta[j];
    value += weight * loss.value(y[r], eta);
    valueSize += Math.abs(weight * loss.value(y[r], eta));
    for (let j = 0; j < p; j++) {
      const term = weight * loss.slope(y[r], eta) * x[r * p + j];
      gradient[j] += term;
      gradientSize[j] += Math.abs(term);
      for (let k = 0; k < p; k++) {
        curvature[j * p + k] += weight * loss.curvature(y[r], eta) * x[r * p + j] * x[r * p + k];
      }
    }
  }
  return { value, valueSize, gradient, gradientSize, curvature };
}

function expectOk<T>(checked: Checked<T>): T {
  if (!checked.ok) throw new Error(checked.failure.message);
  return checked.value;
}

const largest = (values: Float64Array): number => values.reduce((most, v) => Math.max(most, Math.abs(v)), 0);

function expectNear(got: Float64Array, wanted: Float64Array, tolerance: number, size: number): void {
  expect(got.length).toBe(wanted.length);
  for (let j = 0; j < wanted.length; j++) {
    expect(Math.abs(got[j] - wanted[j])).toBeLessThanOrEqual(tolerance * size);
  }
}

function problemOf(shard: Shard, random: Random) {
  const { p } = shard;
  return {
    center: normals(random, p, 0.5),
    scale: 10 ** (4 * random.uniform() - 3),
    diagonal: Float64Array.from({ length: p }, () => 0.1 + random.uniform()),
    start: normals(random, p, 0.3),
  };
}

describe('proximal', () => {
  test('the point satisfies ∇φ(x) + M (x − center) = 0', () => {
    fc.assert(
      fc.property(anyCase, (given) => {
        const random = seededRandom(given.seed);
        const shard = shardOf(given, random);
        const loss = lossOf(given.loss);
        const { center, scale, diagonal, start } = problemOf(shard, random);
        const { point, newtonSteps } = expectOk(
          localSolver(shard, loss).proximal(center, scale, diagonal, start),
        );
        const { gradient, gradientSize } = naive(shard, loss, point);
        for (let j = 0; j < shard.p; j++) {
          const pull = scale * diagonal[j] * (point[j] - center[j]);
          const size =
            largest(gradientSize) + scale * diagonal[j] * (Math.abs(point[j]) + Math.abs(center[j]));
          expect(Math.abs(gradient[j] + pull)).toBeLessThanOrEqual(1e-10 * size);
        }
        expect(newtonSteps).toBeGreaterThanOrEqual(1);
      }),
      { numRuns: 300 },
    );
  });

  test('solving through the rows or through the columns gives the same point', () => {
    fc.assert(
      fc.property(caseOf([1, 10], [21, 40]), (given) => {
        const random = seededRandom(given.seed);
        const few = shardOf(given, random);
        const loss = lossOf(given.loss);
        // every row written many times over at a share of its weight: the same φ, but more rows than columns
        const copies = Math.ceil(given.p / given.rowCount);
        const repeat = (values: Float64Array): Float64Array =>
          Float64Array.from({ length: copies * values.length }, (_, i) => values[i % values.length]);
        const many = denseShard({
          ...few,
          rowCount: copies * few.rowCount,
          x: repeat(entriesOf(few)),
          y: repeat(few.y),
          offset: few.offset === null ? null : repeat(few.offset),
          weights: repeat(few.weights ?? new Float64Array(few.rowCount).fill(1)).map((w) => w / copies),
        });
        const { center, scale, diagonal, start } = problemOf(few, random);
        const byRows = expectOk(localSolver(few, loss).proximal(center, scale, diagonal, start));
        const byColumns = expectOk(localSolver(many, loss).proximal(center, scale, diagonal, start));
        expectNear(byRows.point, byColumns.point, 1e-8, 1 + largest(byColumns.point));
      }),
      { numRuns: 100 },
    );
  });

  test('a far start ends at the same point as a near one', () => {
    fc.assert(
      fc.property(fc.oneof(caseOf([20, 60], [1, 6]), caseOf([1, 10], [21, 40])), (given) => {
        const random = seededRandom(given.seed);
        const shard = shardOf(given, random);
        const solver = localSolver(shard, lossOf(given.loss));
        const { center, diagonal } = problemOf(shard, random);
        const near = expectOk(solver.proximal(center, 0.1, diagonal, center));
        const far = expectOk(solver.proximal(center, 0.1, diagonal, normals(random, shard.p, 3)));
        expectNear(far.point, near.point, 1e-9, 1 + largest(near.point));
      }),
      { numRuns: 100 },
    );
  });

  test('a metric that is not positive is refused', () => {
    const shard = shardOf(
      { seed: 5, rowCount: 20, p: 3, loss: { kind: 'logistic' }, weighted: false, shifted: false },
      seededRandom(5),
    );
    const zero = new Float64Array(3);
    for (const loss of LOSSES) {
      const answer = localSolver(shard, lossOf(loss)).proximal(zero, 1, Float64Array.of(1, 0, 1), zero);
      expect(answer).toMatchObject({ ok: false, failure: { code: 'not-positive-definite' } });
    }
  });
});

describe('evaluate', () => {
  test('gives value, gradient and curvature of the formulas', () => {
    fc.assert(
      fc.property(anyCase, (given) => {
        const random = seededRandom(given.seed);
        const shard = shardOf(given, random);
        const loss = lossOf(given.loss);
        const point = normals(random, shard.p, 0.5);
        const wanted = naive(shard, loss, point);
        const got = expectOk(localSolver(shard, loss).evaluate(point, 'curvature'));
        expect(Math.abs(got.value - wanted.value)).toBeLessThanOrEqual(1e-12 * wanted.valueSize);
        expectNear(got.gradient!, wanted.gradient, 1e-12, largest(wanted.gradientSize));
        expectNear(unpackSymmetric(got.curvature!), wanted.curvature, 1e-12, largest(wanted.curvature));
        const diagonal = wanted.curvature.filter((_, at) => at % (shard.p + 1) === 0);
        expectNear(got.diagonal!, diagonal, 1e-12, largest(diagonal));
      }),
      { numRuns: 200 },
    );
  });

  test('gives what is wanted and what comes before it, with the same bits', () => {
    const random = seededRandom(11);
    const shard = shardOf(
      { seed: 11, rowCount: 70, p: 5, loss: { kind: 'poisson' }, weighted: true, shifted: true },
      random,
    );
    const solver = localSolver(shard, lossOf({ kind: 'poisson' }));
    const point = normals(random, 5, 0.5);
    const all = expectOk(solver.evaluate(point, 'curvature'));
    expect(solver.evaluate(point, 'value')).toEqual({
      ok: true,
      value: { value: all.value, gradient: null, diagonal: null, curvature: null },
    });
    expect(expectOk(solver.evaluate(point, 'gradient'))).toEqual({ ...all, diagonal: null, curvature: null });
    expect(expectOk(solver.evaluate(point, 'diagonal'))).toEqual({ ...all, curvature: null });
  });

  test('a trial point far out gets a huge finite value; one beyond all numbers is named', () => {
    const shard = denseShard({
      rowCount: 2,
      p: 1,
      x: Float64Array.of(1, 1),
      y: Float64Array.of(1, 2),
      weights: null,
      offset: null,
      rowCountTotal: 2,
    });
    const far = Float64Array.of(1e160);
    expect(expectOk(localSolver(shard, lossOf({ kind: 'squared' })).evaluate(far, 'gradient')).value).toBe(
      1e300,
    );
    const poisson = expectOk(
      localSolver(shard, lossOf({ kind: 'poisson' })).evaluate(Float64Array.of(900), 'curvature'),
    );
    expect(poisson.value).toBeGreaterThan(1e129);
    expect(poisson.curvature!.every(Number.isFinite)).toBe(true);
    const doubled = denseShard({ ...shard, x: Float64Array.of(10, -10) });
    expect(
      localSolver(doubled, lossOf({ kind: 'poisson' })).evaluate(Float64Array.of(1e308), 'value'),
    ).toMatchObject({
      ok: false,
      failure: { code: 'number-not-finite' },
    });
  });
});

describe('ownFit', () => {
  test('is the quadratic at the fit held near the point', () => {
    fc.assert(
      fc.property(caseOf([1, 60], [1, 8]), fc.constantFrom(0.1, 0.3, 2), (given, hold) => {
        const random = seededRandom(given.seed);
        const shard = shardOf(given, random);
        const loss = lossOf(given.loss);
        const { p } = shard;
        const solver = localSolver(shard, loss);
        const point = normals(random, p, 0.3);
        const { curvature } = naive(shard, loss, point);
        const own = curvature.filter((_, at) => at % (p + 1) === 0);
        const floor = 1e-3 * Math.max(largest(own), shard.rowCount / shard.rowCountTotal);
        const metric = own.map((d) => Math.max(d, floor));
        const fit = expectOk(solver.proximal(point, hold, metric, point)).point;
        const there = naive(shard, loss, fit);
        const got = expectOk(solver.ownFit(point, hold));
        expectNear(unpackSymmetric(got.curvature), there.curvature, 1e-6, largest(there.curvature));
        const linear = there.gradient.map((g, j) => {
          let sum = -g;
          for (let k = 0; k < p; k++) sum += there.curvature[j * p + k] * fit[k];
          return sum;
        });
        expectNear(got.linear, linear, 1e-6, largest(there.curvature) * (1 + p * largest(fit)));
      }),
      { numRuns: 150 },
    );
  });
});

describe('sketch', () => {
  test('is the curvature at the point times the directions, column by column', () => {
    fc.assert(
      fc.property(caseOf([1, 200], [1, 8]), fc.integer({ min: 1, max: 5 }), (given, columns) => {
        const random = seededRandom(given.seed);
        const shard = shardOf(given, random);
        const loss = lossOf(given.loss);
        const { p } = shard;
        const point = normals(random, p, 0.3);
        const directions = normals(random, columns * p, 1);
        const { curvature } = naive(shard, loss, point);
        const wanted = directions.map((_, at) => {
          const column = at - (at % p);
          let sum = 0;
          for (let j = 0; j < p; j++) sum += curvature[(at % p) * p + j] * directions[column + j];
          return sum;
        });
        const got = expectOk(localSolver(shard, loss).sketch(point, directions, columns));
        expectNear(got, wanted, 1e-11, p * largest(curvature) * largest(directions));
      }),
      { numRuns: 150 },
    );
  });
});

describe('repetition', () => {
  test('an answer has the same bits whatever was asked before', () => {
    fc.assert(
      fc.property(anyCase, (given) => {
        const random = seededRandom(given.seed);
        const shard = shardOf(given, random);
        const loss = lossOf(given.loss);
        const first = problemOf(shard, random);
        const others = Array.from({ length: 10 }, () => problemOf(shard, random));
        const busy = localSolver(shard, loss);
        const ask = (solver: typeof busy) => [
          solver.proximal(first.center, first.scale, first.diagonal, first.start),
          solver.evaluate(first.center, 'curvature'),
          solver.ownFit(first.center, 0.3),
          solver.sketch(first.center, first.start, 1),
          solver.factor(),
        ];
        const before = ask(busy);
        for (const other of others) busy.proximal(other.center, other.scale, other.diagonal, other.start);
        expect(ask(busy)).toEqual(before);
        expect(ask(localSolver(shard, loss))).toEqual(before);
      }),
      { numRuns: 60 },
    );
  });
});

/** Packed lower RᵀR equals packed upper, column by column: both run over (i ≤ j). */
function gramOfFactor(factor: Float64Array, columns: number): Float64Array {
  const at = (i: number, j: number): number => (i <= j ? factor[(j * (j + 1)) / 2 + i] : 0);
  const out = new Float64Array(columns * columns);
  for (let i = 0; i < columns; i++) {
    for (let j = 0; j < columns; j++) {
      for (let k = 0; k < columns; k++) out[i * columns + j] += at(k, i) * at(k, j);
    }
  }
  return out;
}

describe('triangular factor', () => {
  test('RᵀR is the Gram matrix of √(w/N) · [X, y − offset], with no negative diagonal entry', () => {
    fc.assert(
      fc.property(anyCase, (given) => {
        const shard = shardOf(given, seededRandom(given.seed));
        const columns = shard.p + 1;
        const gram = new Float64Array(columns * columns);
        for (let r = 0; r < shard.rowCount; r++) {
          const row = [
            ...entriesOf(shard).subarray(r * shard.p, (r + 1) * shard.p),
            shard.y[r] - (shard.offset?.[r] ?? 0),
          ];
          const weight = (shard.weights?.[r] ?? 1) / shard.rowCountTotal;
          for (let i = 0; i < columns; i++) {
            for (let j = 0; j < columns; j++) gram[i * columns + j] += weight * row[i] * row[j];
          }
        }
        const factor = expectOk(localSolver(shard, lossOf({ kind: 'squared' })).factor());
        expectNear(gramOfFactor(factor, columns), gram, 1e-12, largest(gram));
        for (let i = 0; i < columns; i++) expect(factor[(i * (i + 1)) / 2 + i]).toBeGreaterThanOrEqual(0);
      }),
      { numRuns: 100 },
    );
  });

  test('merging the factors of parts gives the factor of all rows', () => {
    fc.assert(
      fc.property(
        fc.integer({ min: 1, max: 1e9 }),
        fc.integer({ min: 1, max: 9 }),
        fc.array(fc.integer({ min: 1, max: 40 }), { minLength: 1, maxLength: 5 }),
        (seed, columns, sizes) => {
          const random = seededRandom(seed);
          const parts = sizes.map((size) => normals(random, size * columns, 1));
          // independent columns, so that the factor is unique
          parts.push(normals(random, 3 * columns * columns, 1));
          const all = Float64Array.from(parts.flatMap((part) => [...part]));
          const factors = parts.map((part) => triangularFactor(part, part.length / columns, columns));
          const merged = mergeFactors(factors, columns);
          const whole = triangularFactor(all, all.length / columns, columns);
          expectNear(merged, whole, 1e-12, largest(whole));
          expect(mergeFactors(factors, columns)).toEqual(merged);
        },
      ),
      { numRuns: 100 },
    );
  });

  test('columns that depend on each other leave a finite factor', () => {
    const random = seededRandom(3);
    const few = normals(random, 3 * 40, 1);
    const factor = triangularFactor(few, 3, 40);
    const again = mergeFactors([factor, factor, new Float64Array(factor.length)], 40);
    expectNear(
      gramOfFactor(again, 40),
      gramOfFactor(factor, 40).map((g) => 2 * g),
      1e-13,
      100,
    );
  });

  test('keeps what forming the Gram matrix would lose', () => {
    // Läuchli's matrix: with ε² below the machine epsilon XᵀX is singular, while R₂₂ = ε √(2 + ε²) / √(1 + ε²)
    const epsilon = 1e-9;
    const factor = triangularFactor(Float64Array.of(1, 1, epsilon, 0, 0, epsilon), 3, 2);
    expect(factor[2] / (epsilon * Math.SQRT2)).toBeCloseTo(1, 6);
  });
});
