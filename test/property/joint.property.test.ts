import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { packSymmetric } from '../../numerics/packed.js';
import { leastSubgradient, noPenalty, type Penalty, penaltyValue } from '../../numerics/penalty.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import { maxAbs } from '../../numerics/vector.js';
import type { Checked } from '../../protocol/failure.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { denseShard } from '../../worker/design/dense-rows.js';
import type { Shard } from '../../worker/design/shard.js';
import { type LocalSolver, localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import { entriesOf } from '../support/dense.js';

/** The joint step: φ of one site, a quadratic for the others, and the penalty. */

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
  readonly lasso: number;
  readonly ridge: number;
}

const caseOf = (rows: [number, number], columns: [number, number]) =>
  fc.record({
    seed: fc.integer({ min: 1, max: 1e9 }),
    rowCount: fc.integer({ min: rows[0], max: rows[1] }),
    p: fc.integer({ min: columns[0], max: columns[1] }),
    loss: fc.constantFrom(...LOSSES),
    lasso: fc.constantFrom(0, 0.01, 0.1),
    ridge: fc.constantFrom(0, 0.01, 0.3),
  });

const normals = (random: Random, n: number, spread: number): Float64Array =>
  Float64Array.from({ length: n }, () => spread * random.normal());

/** Rows with an intercept, an offset and, of a third of them, no weight; another `from` gives other rows of one truth. */
function shardOf(
  { p, loss }: Case,
  rowCount: number,
  total: number,
  truth: Float64Array,
  random: Random,
): Shard {
  const x = normals(random, rowCount * p, 1);
  for (let r = 0; r < rowCount; r++) x[r * p] = 1;
  const offset = normals(random, rowCount, 0.3);
  const y = Float64Array.from({ length: rowCount }, (_, r) => {
    let eta = offset[r];
    for (let j = 0; j < p; j++) eta += x[r * p + j] * truth[j];
    if (loss.kind === 'squared' || loss.kind === 'huber') return eta + random.normal();
    return loss.kind === 'logistic'
      ? Number(random.uniform() < lossOf(loss).mean(eta))
      : random.poisson(Math.exp(Math.min(eta, 4)));
  });
  const weights = Float64Array.from({ length: rowCount }, () => random.integer(3));
  return denseShard({ rowCount, p, x, y, weights, offset, rowCountTotal: total });
}

/** The penalty leaves the intercept alone. */
function penaltyOf({ p, lasso, ridge }: Case): Penalty {
  const weight = (of: number): Float64Array => Float64Array.from({ length: p }, (_, j) => (j === 0 ? 0 : of));
  return { ...noPenalty(p), l1: weight(lasso), l2: weight(ridge) };
}

/** B = AᵀA / m of m ≥ p rows, so that it is positive definite, and c. */
function othersOf(p: number, random: Random) {
  const m = 2 * p + 3;
  const a = normals(random, m * p, 1);
  const full = new Float64Array(p * p);
  for (let r = 0; r < m; r++)
    for (let i = 0; i < p; i++)
      for (let j = 0; j < p; j++) full[i * p + j] += (a[r * p + i] * a[r * p + j]) / m;
  return { curvature: packSymmetric(full, p), linear: normals(random, p, 0.5), full };
}

const nothing = (p: number) => ({
  curvature: new Float64Array((p * (p + 1)) / 2),
  linear: new Float64Array(p),
});

function expectOk<T>(checked: Checked<T>): T {
  if (!checked.ok) throw new Error(`${checked.failure.code}: ${checked.failure.message}`);
  return checked.value;
}

/** Sum of Bx − c, and the sizes of its terms. */
function othersAt(full: Float64Array, linear: Float64Array, x: Float64Array) {
  const p = x.length;
  const size = linear.map(Math.abs);
  const gradient = linear.map((value) => -value);
  for (let i = 0; i < p; i++) {
    for (let j = 0; j < p; j++) {
      gradient[i] += full[i * p + j] * x[j];
      size[i] += Math.abs(full[i * p + j] * x[j]);
    }
  }
  return { gradient, size: maxAbs(size) };
}

/** ∇φ as the formula stands, and the largest sum of absolute terms in it. */
function naiveGradient(shard: Shard, form: LossForm, x: Float64Array) {
  const loss = lossOf(form);
  const { p, rowCount } = shard;
  const entries = entriesOf(shard);
  const gradient = new Float64Array(p);
  const size = new Float64Array(p);
  for (let r = 0; r < rowCount; r++) {
    let eta = shard.offset?.[r] ?? 0;
    for (let j = 0; j < p; j++) eta += entries[r * p + j] * x[j];
    const slope = ((shard.weights?.[r] ?? 1) * loss.slope(shard.y[r], eta)) / shard.rowCountTotal;
    for (let j = 0; j < p; j++) {
      gradient[j] += slope * entries[r * p + j];
      size[j] += Math.abs(slope * entries[r * p + j]);
    }
  }
  return { gradient, size: maxAbs(size) };
}

const solverOf = (shard: Shard, given: Case): LocalSolver => localSolver(shard, lossOf(given.loss));

describe('the joint step', () => {
  test('ends where the least subgradient is rounding, from any start', () => {
    fc.assert(
      fc.property(fc.oneof(caseOf([1, 60], [1, 12]), caseOf([1, 8], [15, 30])), (given) => {
        const random = seededRandom(given.seed);
        const { p, rowCount } = given;
        const shard = shardOf(given, rowCount, 4 * rowCount, normals(random, p, 1 / Math.sqrt(p)), random);
        const g = penaltyOf(given);
        const { full, ...others } = othersOf(p, random);
        const start = normals(random, p, 1);
        const { point, newtonSteps } = expectOk(solverOf(shard, given).joint(start, others, g.l1, g.l2));
        const own = naiveGradient(shard, given.loss, point);
        const rest = othersAt(full, others.linear, point);
        const gradient = own.gradient.map((value, j) => value + rest.gradient[j]);
        const kappa = maxAbs(leastSubgradient(g, point, gradient));
        expect(kappa).toBeLessThanOrEqual(
          1e-11 * (own.size + rest.size + given.lasso + given.ridge * maxAbs(point)),
        );
        if (given.loss.kind === 'squared') expect(newtonSteps).toBe(1);
        expect(newtonSteps).toBeLessThanOrEqual(30);
      }),
      { numRuns: 300 },
    );
  });

  test('of one site that is alone is the pooled fit: proximal gradient steps find nothing lower', () => {
    fc.assert(
      fc.property(caseOf([30, 80], [1, 6]), (given) => {
        const random = seededRandom(given.seed);
        const { p, rowCount } = given;
        const shard = shardOf(given, rowCount, rowCount, normals(random, p, 1 / Math.sqrt(p)), random);
        const g = penaltyOf({ ...given, ridge: Math.max(given.ridge, 0.01) });
        const solver = solverOf(shard, given);
        const zero = new Float64Array(p);
        const { point } = expectOk(solver.joint(zero, nothing(p), g.l1, g.l2));
        const objective = (x: Float64Array): number =>
          expectOk(solver.evaluate(x, 'value')).value + penaltyValue(g, x);
        const twin = byProximalGradient(solver, g, objective, zero);
        expect(objective(point)).toBeLessThanOrEqual(
          objective(twin) + 1e-13 * (1 + Math.abs(objective(twin))),
        );
        for (let j = 0; j < p; j++) expect(Math.abs(point[j] - twin[j])).toBeLessThanOrEqual(1e-4);
      }),
      { numRuns: 60 },
    );
  });

  test('of a site of squared loss, the other as it is, is the fit of both', () => {
    fc.assert(
      fc.property(caseOf([20, 50], [1, 8]), (any) => {
        const given: Case = { ...any, loss: { kind: 'squared' } };
        const random = seededRandom(given.seed);
        const { p, rowCount } = given;
        const truth = normals(random, p, 1);
        const [one, two] = [1, 2].map(() => shardOf(given, rowCount, 2 * rowCount, truth, random));
        const both = denseShard({
          ...one,
          rowCount: 2 * rowCount,
          x: Float64Array.of(...entriesOf(one), ...entriesOf(two)),
          y: Float64Array.of(...one.y, ...two.y),
          weights: Float64Array.of(...(one.weights ?? []), ...(two.weights ?? [])),
          offset: Float64Array.of(...(one.offset ?? []), ...(two.offset ?? [])),
        });
        const g = penaltyOf({ ...given, ridge: Math.max(given.ridge, 0.01) });
        const zero = new Float64Array(p);
        const other = expectOk(solverOf(two, given).ownFit(zero, 1));
        const split = expectOk(solverOf(one, given).joint(zero, other, g.l1, g.l2)).point;
        const pooled = expectOk(solverOf(both, given).joint(zero, nothing(p), g.l1, g.l2)).point;
        for (let j = 0; j < p; j++) {
          expect(Math.abs(split[j] - pooled[j])).toBeLessThanOrEqual(1e-9 * (1 + maxAbs(pooled)));
        }
      }),
      { numRuns: 60 },
    );
  });

  test('its ends are the value, gradient and curvature there, to the bit; step by step it is the same', () => {
    fc.assert(
      fc.property(caseOf([1, 40], [1, 10]), (given) => {
        const random = seededRandom(given.seed);
        const { p, rowCount } = given;
        const shard = shardOf(given, rowCount, 3 * rowCount, normals(random, p, 0.5), random);
        const g = penaltyOf(given);
        const others = othersOf(p, random);
        const start = normals(random, p, 0.5);
        const solver = solverOf(shard, given);
        const joint = expectOk(solver.joint(start, others, g.l1, g.l2));
        for (const [at, end] of [
          [start, joint.start],
          [joint.point, joint.end],
        ] as const) {
          const { value, gradient, curvature } = expectOk(solver.evaluate(at, 'curvature'));
          expect(end).toEqual({ value, gradient, curvature });
        }
        const steps = solver.jointSteps(start, others, g.l1, g.l2);
        let turn = steps.next();
        while (!turn.done) turn = steps.next();
        expect(expectOk(turn.value)).toEqual(joint);
      }),
      { numRuns: 60 },
    );
  });
});

describe('where curvature is missing', () => {
  const given: Case = { seed: 3, rowCount: 5, p: 8, loss: { kind: 'squared' }, lasso: 0.01, ridge: 0 };
  /** Both classes where there are classes: without one of them the intercept has no finite estimate. */
  const shardWith = (loss: LossForm): Shard => {
    const random = seededRandom(given.seed);
    const truth = normals(random, given.p, 0.5);
    const shard = shardOf({ ...given, loss }, given.rowCount, given.rowCount, truth, random);
    const y = loss.kind === 'logistic' ? shard.y.map((_, r) => r % 2) : shard.y;
    return { ...shard, y, weights: null };
  };

  test.each(LOSSES)('$kind with fewer rows than columns, a lasso alone: a minimiser is found', (loss) => {
    const shard = shardWith(loss);
    const g = penaltyOf({ ...given, loss });
    const zero = new Float64Array(given.p);
    const { point } = expectOk(localSolver(shard, lossOf(loss)).joint(zero, nothing(given.p), g.l1, g.l2));
    const { gradient } = naiveGradient(shard, loss, point);
    expect(maxAbs(leastSubgradient(g, point, gradient))).toBeLessThanOrEqual(1e-10);
  });

  test('a quadratic of the others that bends down is refused', () => {
    const others = nothing(given.p);
    for (let i = 0; i < given.p; i++) others.curvature[(i * (i + 1)) / 2 + i] = -10;
    const zero = new Float64Array(given.p);
    for (const loss of LOSSES) {
      const solved = localSolver(shardWith(loss), lossOf(loss)).joint(zero, others, zero, zero);
      expect(solved).toMatchObject({ ok: false, failure: { code: 'not-positive-definite' } });
    }
  });

  test('a start beyond all numbers is refused', () => {
    const far = new Float64Array(given.p).fill(1e200);
    const zero = new Float64Array(given.p);
    const squared: LossForm = { kind: 'squared' };
    const solver = localSolver(shardWith(squared), lossOf(squared));
    const solved = solver.joint(far, nothing(given.p), zero, zero);
    expect(solved).toMatchObject({ ok: false, failure: { code: 'number-not-finite' } });
  });
});

/** Proximal gradient with backtracking (Beck and Teboulle 2009), 20,000 steps: slow, and nothing in common. */
function byProximalGradient(
  solver: LocalSolver,
  g: Penalty,
  objective: (x: Float64Array) => number,
  start: Float64Array,
): Float64Array {
  let x = start;
  let rate = 1;
  for (let step = 0; step < 20_000; step++) {
    const { gradient } = expectOk(solver.evaluate(x, 'gradient'));
    if (gradient === null) throw new Error('no gradient');
    for (;;) {
      const next = x.map((value, j) => {
        const moved = value - rate * gradient[j];
        const shrunk = Math.sign(moved) * Math.max(Math.abs(moved) - rate * g.l1[j], 0);
        return shrunk / (1 + rate * g.l2[j]);
      });
      const moved = maxAbs(next.map((value, j) => value - x[j]));
      if (moved < 1e-9 * rate) return next;
      if (objective(next) <= objective(x)) {
        x = next;
        rate *= 1.1;
        break;
      }
      rate /= 2;
      if (rate < 1e-12) return x;
    }
  }
  return x;
}
