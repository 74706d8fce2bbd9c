import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { curvatureRung } from '../../coordinator/consensus/curvature-rung.js';
import type { Method, MethodEnd } from '../../coordinator/consensus/method.js';
import { penaltyValue } from '../../coordinator/consensus/penalty.js';
import { pooledRung } from '../../coordinator/consensus/pooled-rung.js';
import type { ConsensusProblem } from '../../coordinator/consensus/problem.js';
import { proximalRung } from '../../coordinator/consensus/proximal-rung.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { lossNamed } from '../../worker/losses/index.js';
import { consensusProblem, lossOf, pooledOptimum } from '../bench/measure.js';
import { makeRandomProblem } from '../bench/random-problems.js';
import { driveMethods, must } from '../support/method-driver.js';

const seeds = fc.integer({ min: 1, max: 1e6 });
const TOLERANCE = 1e-8;

type Make = (problem: ConsensusProblem) => Method;

/** Ends of a rung on a random problem, with the true relative gap of the point it stands by. */
function solveRandom(
  seed: number,
  make: Make,
  budget: number,
): { end: MethodEnd; gap: number; name: string } {
  const problem = makeRandomProblem(seed);
  const loss = lossOf(problem.loss);
  const pooled = localSolver(problem.pooled, loss);
  const optimum = pooledOptimum(problem, pooled);
  const [end] = driveMethods(
    [make(consensusProblem(problem, TOLERANCE, budget))],
    problem.shards.map((shard) => localSolver(shard, loss)),
  ).ends;
  const value = must(pooled.evaluate(end.z, 'value')).value + penaltyValue(problem.penalty, end.z);
  return { end, gap: (value - optimum) / Math.max(Math.abs(optimum), 1e-12), name: problem.name };
}

describe.each<[string, Make, number]>([
  ['curvature', curvatureRung, Number.POSITIVE_INFINITY],
  ['proximal, three matrices', proximalRung, 3],
  ['proximal, none', proximalRung, 0],
])('the rung %s', (_, make, budget) => {
  test('solves random penalised problems, and its certificate holds against the pooled optimum', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const { end, gap, name } = solveRandom(seed, make, budget);
        expect(`${name}: ${end.outcome}`).toBe(`${name}: solved`);
        expect(end.certificate?.relativeGap).toBeLessThanOrEqual(TOLERANCE);
        expect(gap).toBeLessThanOrEqual(TOLERANCE);
        expect(end.certificate?.kind).toBe(budget === 0 ? 'estimate' : (end.certificate?.kind ?? 'measured'));
      }),
      { numRuns: 25 },
    );
  }, 60_000);
});

describe('the pooled rung', () => {
  test('solves a squared loss exactly in one round', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const problem = makeRandomProblem(seed, 'squared');
        const loss = lossNamed('squared');
        const optimum = pooledOptimum(problem, localSolver(problem.pooled, loss));
        const driven = driveMethods(
          [pooledRung(consensusProblem(problem, 1e-12, 3))],
          problem.shards.map((shard) => localSolver(shard, loss)),
        );
        const [end] = driven.ends;
        expect(end.outcome).toBe('solved');
        expect(driven.rounds).toBe(1);
        expect(Math.abs(end.loss + end.penalty - optimum)).toBeLessThanOrEqual(1e-12 * Math.abs(optimum));
      }),
      { numRuns: 25 },
    );
  });
});

describe('what has no optimum is named, not looped on', () => {
  const separated = (): ConsensusProblem & { sites: ReturnType<typeof localSolver>[] } => {
    const x = Float64Array.from([-2, -1.5, -1, 1, 1.5, 2].flatMap((value) => [1, value]));
    const shard = {
      rowCount: 6,
      p: 2,
      x,
      y: Float64Array.of(0, 0, 0, 1, 1, 1),
      weights: null,
      offset: null,
      rowCountTotal: 6,
    };
    const problem = makeRandomProblem(1);
    return {
      ...consensusProblem(problem, TOLERANCE, Number.POSITIVE_INFINITY),
      p: 2,
      siteWeights: [1],
      start: new Float64Array(2),
      quadratic: false,
      penalty: {
        l1: new Float64Array(2),
        l2: new Float64Array(2),
        lower: new Float64Array(2).fill(Number.NEGATIVE_INFINITY),
        upper: new Float64Array(2).fill(Number.POSITIVE_INFINITY),
      },
      sites: [localSolver(shard, lossNamed('logistic'))],
    };
  };

  test.each<[string, Make, number]>([
    ['curvature', curvatureRung, Number.POSITIVE_INFINITY],
    ['proximal', proximalRung, 3],
  ])('separated classes without a penalty, on the rung %s', (_, make, budget) => {
    const { sites, ...problem } = separated();
    const [end] = driveMethods([make({ ...problem, curvatureMost: budget })], sites).ends;
    expect([end.outcome, end.reason]).toEqual(['unbounded', 'separable']);
    expect(end.columnsAtFault).toContain(1);
  });

  test.each<[string, Make, 'squared' | 'logistic']>([
    ['pooled', pooledRung, 'squared'],
    ['curvature', curvatureRung, 'logistic'],
    ['proximal', proximalRung, 'logistic'],
  ])('a column that repeats another without a penalty, on the rung %s', (_, make, lossName) => {
    const x = Float64Array.from([0.3, -1.1, 0.4, 1.7, -0.6, -0.7].flatMap((value) => [1, value, -2 * value]));
    const y = lossName === 'squared' ? Float64Array.of(1, 2, 0, 3, 1, 2) : Float64Array.of(1, 0, 0, 1, 1, 0);
    const shard = { rowCount: 6, p: 3, x, y, weights: null, offset: null, rowCountTotal: 6 };
    const { sites: _sites, ...base } = separated();
    const zeros = new Float64Array(3);
    const [end] = driveMethods(
      [
        make({
          ...base,
          p: 3,
          start: zeros,
          quadratic: lossName === 'squared',
          curvatureMost: 3,
          penalty: {
            l1: zeros,
            l2: zeros,
            lower: new Float64Array(3).fill(Number.NEGATIVE_INFINITY),
            upper: new Float64Array(3).fill(Number.POSITIVE_INFINITY),
          },
        }),
      ],
      [localSolver(shard, lossNamed(lossName))],
    ).ends;
    expect([end.outcome, end.reason, end.columnsAtFault]).toEqual(['refused', 'rank-deficient', [2]]);
  });
});
