import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { cholesky, choleskySolve } from '../../numerics/cholesky.js';
import { packSymmetric, unpackSymmetric } from '../../numerics/packed.js';
import { seededRandom } from '../../numerics/random.js';
import type { Part } from '../../protocol/messages/part.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { denseShard } from '../../worker/design/dense-rows.js';
import type { Shard } from '../../worker/design/shard.js';
import { atBestIntercept } from '../../worker/local/intercept.js';
import { type LocalSolver, localSolver } from '../../worker/local/local-solver.js';
import { ownInterceptSolver } from '../../worker/local/own-intercept.js';
import { partSolvers } from '../../worker/local/part-solvers.js';
import { lossOf } from '../../worker/losses/index.js';
import { entriesOf } from '../support/dense.js';
import { failureOf, soundValue } from '../support/tables.js';

const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 2 },
];

interface Case {
  readonly seed: number;
  readonly rowCount: number;
  readonly slopes: number;
  readonly loss: LossForm;
  readonly full: boolean;
}

const caseOf = (rows: [number, number], columns: [number, number]): fc.Arbitrary<Case> =>
  fc.record({
    seed: fc.integer({ min: 1, max: 1e9 }),
    rowCount: fc.integer({ min: rows[0], max: rows[1] }),
    slopes: fc.integer({ min: columns[0], max: columns[1] }),
    loss: fc.constantFrom(...LOSSES),
    full: fc.boolean(),
  });

/** Ones first; the response has both classes, or a count above zero, so that there is a best intercept. */
function sceneOf({ seed, rowCount, slopes, loss, full }: Case) {
  const random = seededRandom(seed);
  const p = slopes + 1;
  const numbers = (count: number) => Float64Array.from({ length: count }, () => random.normal());
  const x = numbers(rowCount * p);
  for (let r = 0; r < rowCount; r++) x[r * p] = 1;
  const y = Float64Array.from({ length: rowCount }, (_, r) =>
    loss.kind === 'logistic' || loss.kind === 'poisson'
      ? r < 2
        ? r
        : random.integer(2)
      : 3 * random.normal(),
  );
  const shard = denseShard({
    rowCount,
    p,
    x,
    y,
    weights: full ? Float64Array.from({ length: rowCount }, () => 0.2 + random.uniform()) : null,
    offset: full ? numbers(rowCount) : null,
    rowCountTotal: 2 * rowCount,
  });
  return { shard, numbers, random };
}

const close = (a: ArrayLike<number>, b: ArrayLike<number>, tolerance: number): void => {
  expect(a.length).toBe(b.length);
  for (let j = 0; j < a.length; j++)
    expect(Math.abs(a[j] - b[j])).toBeLessThanOrEqual(tolerance * (1 + Math.abs(b[j])));
};

const full = (solver: LocalSolver, point: Float64Array) => {
  const at = soundValue(solver.evaluate(point, 'curvature'));
  if (at.gradient === null || at.curvature === null || at.diagonal === null) throw new Error('not evaluated');
  return { value: at.value, gradient: at.gradient, diagonal: at.diagonal, curvature: at.curvature };
};

describe('an intercept of its own', () => {
  test('is where the slope of the loss along it is zero, and the value there is the least', () => {
    fc.assert(
      fc.property(caseOf([2, 30], [1, 4]), (one) => {
        const { shard, numbers } = sceneOf(one);
        const loss = lossOf(one.loss);
        const theta = numbers(one.slopes);
        const plain = localSolver(shard, loss);
        const best = atBestIntercept(shard, loss, theta);
        const at = full(plain, best);
        expect(Math.abs(at.gradient[0])).toBeLessThan(1e-13 * (1 + Math.abs(best[0])));
        for (const away of [-1e-3, 1e-3]) {
          const moved = Float64Array.from(best);
          moved[0] += away;
          expect(soundValue(plain.evaluate(moved, 'value')).value).toBeGreaterThanOrEqual(at.value - 1e-14);
        }
      }),
      { numRuns: 120 },
    );
  });

  test('gives the gradient and the curvature of the profile: finite differences', () => {
    fc.assert(
      fc.property(caseOf([4, 30], [1, 4]), (one) => {
        fc.pre(one.loss.kind !== 'huber');
        const { shard, numbers } = sceneOf(one);
        const solver = ownInterceptSolver(shard, lossOf(one.loss));
        const theta = numbers(one.slopes);
        const at = full(solver, theta);
        const curvature = unpackSymmetric(at.curvature);
        const h = 1e-5;
        for (let j = 0; j < one.slopes; j++) {
          const [up, down] = [1, -1].map((sign) => {
            const moved = Float64Array.from(theta);
            moved[j] += sign * h;
            return full(solver, moved);
          });
          expect((up.value - down.value) / (2 * h)).toBeCloseTo(at.gradient[j], 7);
          for (let i = 0; i < one.slopes; i++)
            expect((up.gradient[i] - down.gradient[i]) / (2 * h)).toBeCloseTo(
              curvature[i * one.slopes + j],
              6,
            );
          expect(at.diagonal[j]).toBeCloseTo(curvature[j * one.slopes + j], 12);
        }
      }),
      { numRuns: 60 },
    );
  });

  test('is free in a proximal point, more columns than rows included', () => {
    fc.assert(
      fc.property(caseOf([2, 16], [1, 40]), (one) => {
        const { shard, numbers } = sceneOf(one);
        const solver = ownInterceptSolver(shard, lossOf(one.loss));
        const center = numbers(one.slopes);
        const diagonal = numbers(one.slopes).map((value) => 0.2 + Math.abs(value));
        const { point } = soundValue(solver.proximal(center, 1.5, diagonal, numbers(one.slopes)));
        const { gradient } = full(solver, point);
        // the optimum: ∇φ + M (x − center) = 0
        for (let j = 0; j < one.slopes; j++)
          expect(Math.abs(gradient[j] + 1.5 * diagonal[j] * (point[j] - center[j]))).toBeLessThan(1e-9);
      }),
      { numRuns: 100 },
    );
  });

  test('sketch, own fit, joint step and factor agree with the profile', () => {
    fc.assert(
      fc.property(caseOf([8, 40], [1, 4]), (one) => {
        const { shard, numbers } = sceneOf(one);
        const solver = ownInterceptSolver(shard, lossOf(one.loss));
        const p = one.slopes;
        const theta = numbers(p);
        const at = full(solver, theta);
        const curvature = unpackSymmetric(at.curvature);
        const directions = numbers(2 * p);
        const products = Float64Array.from({ length: 2 * p }, (_, k) => {
          let sum = 0;
          for (let j = 0; j < p; j++)
            sum += curvature[(k % p) * p + j] * directions[Math.floor(k / p) * p + j];
          return sum;
        });
        close(soundValue(solver.sketch(theta, directions, 2)), products, 1e-11);

        const ridge = new Float64Array(p * p);
        for (let j = 0; j < p; j++) ridge[j * p + j] = 0.5 + j;
        const linear = numbers(p);
        const none = new Float64Array(p);
        const others = { curvature: packSymmetric(ridge, p), linear };
        const joint = soundValue(solver.joint(theta, others, none, none));
        expect(joint.start).toEqual({ value: at.value, gradient: at.gradient, curvature: at.curvature });
        for (let j = 0; j < p; j++)
          expect(
            Math.abs(joint.end.gradient[j] + ridge[j * p + j] * joint.point[j] - linear[j]),
          ).toBeLessThan(1e-8);

        if (one.loss.kind !== 'squared') return;
        // φ = ½ ‖R [θ; −1]‖², R the factor without the ones
        const factor = soundValue(solver.factor());
        const last = [...theta, -1];
        let value = 0;
        for (let i = 0; i <= p; i++) {
          let sum = 0;
          for (let j = i; j <= p; j++) sum += factor[(j * (j + 1)) / 2 + i] * last[j];
          value += 0.5 * sum * sum;
        }
        expect(value).toBeCloseTo(at.value, 12);
        const own = soundValue(solver.ownFit(theta, 1));
        const chol = cholesky(unpackSymmetric(own.curvature), p);
        if (chol === null) return;
        const least = choleskySolve(chol, p, own.linear);
        for (const slope of full(solver, least).gradient) expect(Math.abs(slope)).toBeLessThan(1e-9);
      }),
      { numRuns: 60 },
    );
  });

  test('rows that cannot tell it bear nothing', () => {
    for (const [loss, y] of [
      ['logistic', [1, 1, 1]],
      ['logistic', [0, 0, 0]],
      ['poisson', [0, 0, 0]],
    ] as const) {
      const { shard } = sceneOf({ seed: 1, rowCount: 3, slopes: 2, loss: { kind: loss }, full: false });
      const solver = ownInterceptSolver({ ...shard, y: Float64Array.from(y) }, lossOf({ kind: loss }));
      const center = Float64Array.of(3, -1);
      expect(full(solver, center).value).toBe(0);
      expect(full(solver, center).gradient).toEqual(new Float64Array(2));
      const metric = Float64Array.of(1, 1);
      expect(soundValue(solver.proximal(center, 1, metric, new Float64Array(2))).point).toEqual(center);
    }
  });

  test('rows held out lose what they lose at the intercept of the training rows', () => {
    const { shard, numbers } = sceneOf({
      seed: 5,
      rowCount: 20,
      slopes: 2,
      loss: { kind: 'logistic' },
      full: true,
    });
    const rows = (from: number, to: number): Shard =>
      denseShard({
        ...shard,
        rowCount: to - from,
        x: entriesOf(shard).slice(from * 3, to * 3),
        y: shard.y.slice(from, to),
        weights: shard.weights?.slice(from, to) ?? null,
        offset: shard.offset?.slice(from, to) ?? null,
      });
    const shardOf = (part: Part) =>
      part === null ? shard : part.side === 'training' ? rows(0, 14) : rows(14, 20);
    const loss = lossOf({ kind: 'logistic' });
    const parts = partSolvers(shardOf, loss, true);
    const theta = numbers(2);
    const held = parts.solver({ fold: '1', side: 'held-out' });
    const intercept = atBestIntercept(rows(0, 14), loss, theta);
    expect(soundValue(held.evaluate(theta, 'value')).value).toBe(
      soundValue(localSolver(rows(14, 20), loss).evaluate(intercept, 'value')).value,
    );
    expect(failureOf(held.evaluate(theta, 'gradient')).code).toBe('not-supported');
    expect(failureOf(parts.factors(['1'])).code).toBe('not-supported');
  });
});
