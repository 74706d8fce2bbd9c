import { describe, expect, test } from 'vitest';
import { lateCurvatureRung } from '../../coordinator/consensus/late-curvature-rung.js';
import type { LateBarrier, LateMethod } from '../../coordinator/consensus/late-method.js';
import { lateProximalRung } from '../../coordinator/consensus/late-proximal-rung.js';
import type { ConsensusProblem } from '../../coordinator/consensus/problem.js';
import { noPenalty } from '../../numerics/penalty.js';
import { seededRandom } from '../../numerics/random.js';
import { denseShard } from '../../worker/design/dense-rows.js';
import type { Shard } from '../../worker/design/shard.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { type LateRun, simulateLate } from '../bench/late-simulation.js';
import { benchLoss, consensusProblem } from '../bench/measure.js';
import { type BenchProblem, makeProblem } from '../bench/problems.js';
import { entriesOf } from '../support/dense.js';

const SLOW = 5;
const LATE: LateBarrier = {
  quorum: 7,
  oldest: 20,
  agesMs: Array.from({ length: 8 }, (_, i) => (i === SLOW ? 10_000 : 1000)),
};

type Make = (problem: ConsensusProblem, barrier: LateBarrier) => LateMethod;

function run(
  made: BenchProblem,
  make: Make,
  matrices: number,
  barrier: LateBarrier,
  change: Partial<ConsensusProblem> = {},
): LateRun {
  const loss = benchLoss(made.loss);
  const random = seededRandom(3);
  return simulateLate(
    make({ ...consensusProblem(made, 1e-8, matrices), ...change }, barrier),
    made.shards.map((shard) => localSolver(shard, loss)),
    change.penalty ?? made.penalty,
    (site) => (site === SLOW ? 10_000 : 1000) * (1 + 0.1 * random.uniform()),
  );
}

const kinds = ({ asked }: LateRun, site: number): (string | undefined)[] =>
  asked.map(({ posts }) => posts[site]?.kind).filter((kind) => kind !== undefined);

describe('one of eight sites ten times slower', () => {
  test('on the curvature rung it solves joint problems, twice, while the others answer often', () => {
    const solved = run(
      makeProblem('logistic levels lasso by-covariate 8'),
      lateCurvatureRung,
      Infinity,
      LATE,
    );
    expect(solved.end.outcome).toBe('solved');
    expect(kinds(solved, SLOW)).toEqual(['joint', 'joint']);
    expect(solved.answers[SLOW]).toBeLessThanOrEqual(2);
    expect(solved.answers[0]).toBeGreaterThan(solved.answers[SLOW]);
    expect(solved.asked.some(({ standIns }) => standIns.some(({ site }) => site === SLOW))).toBe(true);
  });

  test('on the proximal rung it does so once, for its three matrices hold a certificate too', () => {
    const solved = run(makeProblem('logistic levels lasso by-covariate 8'), lateProximalRung, 3, LATE);
    expect(solved.end).toMatchObject({ outcome: 'solved', rung: 'proximal' });
    expect(kinds(solved, SLOW)).toEqual(['joint', 'evaluate']);
  });

  test('under bounds, which a joint problem knows nothing of, it is asked what the others are', () => {
    const solved = run(makeProblem('logistic correlated box random 8'), lateCurvatureRung, Infinity, LATE);
    expect(solved.end.outcome).toBe('solved');
    expect(new Set(kinds(solved, SLOW))).toEqual(new Set(['evaluate']));
  });

  test('a squared loss takes one answer of everyone', () => {
    const solved = run(makeProblem('squared correlated lasso random 8'), lateCurvatureRung, Infinity, LATE);
    expect(solved.end.outcome).toBe('solved');
    expect(solved.answers).toEqual(Array.from({ length: 8 }, () => 1));
  });

  test('with answers of no age allowed everyone is waited for in every round', () => {
    const barrier = { ...LATE, oldest: 0 };
    const solved = run(
      makeProblem('logistic levels lasso by-covariate 8'),
      lateCurvatureRung,
      Infinity,
      barrier,
    );
    expect(solved.end.outcome).toBe('solved');
    expect(solved.asked.flatMap(({ standIns }) => standIns)).toEqual([]);
    expect(solved.timeMs).toBeGreaterThan(10_000 * solved.answers[SLOW]);
  });
});

describe('ends other than solved', () => {
  test.each([
    ['curvature', lateCurvatureRung, Infinity, 4],
    ['proximal', lateProximalRung, 3, 6],
    ['proximal without matrices', lateProximalRung, 0, 6],
  ] as const)('the round limit holds on the rung %s', (_, make, matrices, roundsMost) => {
    const ended = run(makeProblem('logistic extreme lasso by-response 8'), make, matrices, LATE, {
      roundsMost,
    });
    expect(ended.end.outcome).toBe('round-limit');
    expect(ended.rounds).toBeLessThanOrEqual(roundsMost);
    expect(ended.end.rounds).toBe(ended.rounds);
  });

  /** A well-behaved problem without a penalty, and with its rows changed. */
  const unpenalised = (change: (x: Float64Array, y: Float64Array, p: number) => void): BenchProblem => {
    const made = makeProblem('logistic few ridge random 8');
    const changed = (shard: Shard): Shard => {
      const x = Float64Array.from(entriesOf(shard));
      const y = Float64Array.from(shard.y);
      change(x, y, shard.p);
      return denseShard({ ...shard, x, y });
    };
    return {
      ...made,
      penalty: noPenalty(made.p),
      shards: made.shards.map(changed),
      pooled: changed(made.pooled),
    };
  };

  test('a column twice, without a penalty, is named', () => {
    const twice = unpenalised((x, y, p) => {
      for (let row = 0; row < y.length; row++) x[row * p + 3] = x[row * p + 2];
    });
    const { end } = run(twice, lateCurvatureRung, Infinity, LATE);
    expect(end).toMatchObject({ outcome: 'refused', reason: 'rank-deficient', columnsAtFault: [3] });
  });

  test('separated classes are named', () => {
    const separated = unpenalised((x, y, p) => {
      for (let row = 0; row < y.length; row++) y[row] = Number(x[row * p + 1] > 0);
    });
    const { end } = run(separated, lateCurvatureRung, Infinity, LATE);
    expect(end).toMatchObject({ outcome: 'unbounded', reason: 'separable' });
  });
});
