import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { lateCurvatureRung } from '../../coordinator/consensus/late-curvature-rung.js';
import type { LateBarrier, LateMethod } from '../../coordinator/consensus/late-method.js';
import { lateProximalRung } from '../../coordinator/consensus/late-proximal-rung.js';
import type { ConsensusProblem } from '../../coordinator/consensus/problem.js';
import { penaltyValue } from '../../numerics/penalty.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import type { LossKind } from '../../protocol/specification/types.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { type Latency, type LateRun, simulateLate } from '../bench/late-simulation.js';
import { benchLoss, consensusProblem, pooledOptimum } from '../bench/measure.js';
import { makeRandomProblem } from '../bench/random-problems.js';
import { must } from '../support/method-driver.js';

const seeds = fc.integer({ min: 1, max: 1e6 });
const TOLERANCE = 1e-8;

type Make = (problem: ConsensusProblem, barrier: LateBarrier) => LateMethod;

/** Sites of any speed, heavy tails, absences: whatever the seed holds. */
function drawLatency(random: Random, sites: number): Latency {
  const speeds = Array.from({ length: sites }, () =>
    random.uniform() < 0.3 ? 1 + 30 * random.uniform() : 1,
  );
  const sigma = random.uniform() < 0.5 ? 0 : 1.5 * random.uniform();
  const absent = random.integer(sites);
  const awayMs = random.uniform() < 0.3 ? 50_000 * random.uniform() : 0;
  return (site, nowMs) => {
    const took = 1000 * speeds[site] * (0.9 + 0.2 * random.uniform()) * Math.exp(sigma * random.normal());
    return site === absent && nowMs < awayMs ? awayMs - nowMs + took : took;
  };
}

interface Solved {
  readonly name: string;
  readonly problem: ConsensusProblem;
  readonly barrier: LateBarrier;
  readonly run: LateRun;
  /** True relative gap of a point. */
  readonly gapOf: (z: Float64Array) => number;
}

function solveRandom(seed: number, make: Make, matrices: number, kind?: LossKind): Solved {
  const made = makeRandomProblem(seed, kind);
  const loss = benchLoss(made.loss);
  const sites = made.shards.map((shard) => localSolver(shard, loss));
  const pooled = localSolver(made.pooled, loss);
  const optimum = pooledOptimum(made, pooled);
  const random = seededRandom(seed + 17);
  const barrier: LateBarrier = {
    quorum: 1 + random.integer(sites.length),
    oldest: random.integer(12),
    agesMs: sites.map(() => Math.round(1000 + (random.uniform() < 0.2 ? 9000 * random.uniform() : 0))),
  };
  const problem = consensusProblem(made, TOLERANCE, matrices);
  const latency = drawLatency(random, sites.length);
  const run = simulateLate(make(problem, barrier), sites, made.penalty, latency);
  const gapOf = (z: Float64Array): number => {
    const value = must(pooled.evaluate(z, 'value')).value + penaltyValue(made.penalty, z);
    return (value - optimum) / Math.max(Math.abs(optimum), 1e-12);
  };
  return { name: made.name, problem, barrier, run, gapOf };
}

const key = (point: Float64Array): string => point.join(' ');

/** Per round: the points about which each site has told its gradient (and curvature), from what went over the wire. */
function toldPoints({ asked, sent }: LateRun) {
  const open = asked[0].posts.map((): { point: string; start: Float64Array } | null => null);
  const told = open.map(() => new Map<string, { point: Float64Array; matrix: boolean }>());
  const newest: (string | null)[] = open.map(() => null);
  const heardIn = open.map(() => 0);
  const rounds = asked.map((ask, k) => {
    const before = { heardIn: [...heardIn], newest: [...newest] };
    ask.posts.forEach((post, i) => {
      if (post === null) return;
      const start = post.kind === 'evaluate' ? post.point : post.start;
      open[i] = { point: key(start), start };
    });
    sent[k].replies.forEach((reply, i) => {
      const owed = open[i];
      if (reply === null || owed === null) return;
      open[i] = null;
      heardIn[i] = k + 1;
      if (reply.kind === 'evaluate') {
        const earlier = told[i].get(owed.point)?.matrix ?? false;
        told[i].set(owed.point, { point: owed.start, matrix: earlier || reply.at.curvature !== null });
        newest[i] = owed.point;
      }
      if (reply.kind === 'joint') {
        told[i].set(owed.point, { point: owed.start, matrix: true });
        told[i].set(key(reply.point), { point: reply.point, matrix: true });
        newest[i] = key(reply.point);
      }
    });
    return before;
  });
  return { told, rounds };
}

function expectSoundEnd({ name, problem, run, gapOf }: Solved): void {
  expect(`${name}: ${run.end.outcome}`).toBe(`${name}: solved`);
  expect(run.end.certificate?.relativeGap).toBeLessThanOrEqual(TOLERANCE);
  expect(gapOf(run.end.z)).toBeLessThanOrEqual(TOLERANCE);
  expect(run.end.rounds).toBe(run.rounds);
  const { told } = toldPoints(run);
  const measured = run.end.certificate?.kind === 'measured';
  const common = [...told[0].entries()].filter(([point]) =>
    told.every((own) => own.has(point) && (!measured || own.get(point)?.matrix)),
  );
  // the certified point is one at which every site was heard; what is handed over is at most a model step beyond. Of a
  // squared loss the quadratics at any one point are the functions
  expect(common.some(([, { point }]) => problem.quadratic || gapOf(point) <= TOLERANCE)).toBe(true);
}

function expectBoundedStaleness({ run, barrier }: Solved): void {
  const { rounds } = toldPoints(run);
  run.asked.forEach((ask, k) => {
    const about = ask.posts.flatMap((post) => (post?.kind === 'evaluate' ? [key(post.point)] : []));
    rounds[k].heardIn.forEach((heard, i) => {
      if (k + 1 - heard <= barrier.oldest || ask.waitFor.includes(i)) return;
      // not older than the question: it has answered about the very point that the others are asked about
      expect(about.every((point) => point === rounds[k].newest[i])).toBe(true);
    });
  });
}

/** Matrices that each site was asked for, whether or not its answer came. */
function expectBudgetKept({ run: { asked } }: Solved, matrices: number): void {
  asked[0].posts.forEach((_, i) => {
    const spent = asked.map(({ posts }) => {
      const post = posts[i];
      return post?.kind === 'joint' ? 2 : Number(post?.kind === 'evaluate' && post.want === 'curvature');
    });
    expect(spent.reduce((sum, count) => sum + count, 0)).toBeLessThanOrEqual(matrices);
  });
}

function expectSameAgain({ problem, barrier, run }: Solved, make: Make): void {
  const method = make(problem, barrier);
  let step = method.next();
  for (const [k, sent] of run.sent.entries()) {
    expect(step.done).toBe(false);
    expect(step.value).toEqual(run.asked[k]);
    step = method.next(sent);
  }
  expect(step.done).toBe(true);
  expect(step.value).toEqual(run.end);
}

describe.each<[string, Make, number, LossKind | undefined, number]>([
  ['curvature', lateCurvatureRung, Number.POSITIVE_INFINITY, undefined, 40],
  ["curvature, Huber's loss", lateCurvatureRung, Number.POSITIVE_INFINITY, 'huber', 20],
  ['proximal, three matrices', lateProximalRung, 3, undefined, 40],
  ["proximal, three matrices, Huber's loss", lateProximalRung, 3, 'huber', 20],
  ['proximal, one matrix', lateProximalRung, 1, undefined, 10],
  ['proximal, none', lateProximalRung, 0, undefined, 5],
])('the late rung %s, whoever answers when', (_, make, matrices, kind, numRuns) => {
  test('ends certified by all sites at one point, waits for what is too old, asks for no matrix too many, replays to the bit', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const solved = solveRandom(seed, make, matrices, kind);
        expectSoundEnd(solved);
        expectBoundedStaleness(solved);
        expectBudgetKept(solved, matrices);
        expectSameAgain(solved, make);
      }),
      { numRuns },
    );
  }, 60_000);
});
