import { curvatureRung } from '../../coordinator/consensus/curvature-rung.js';
import type { Method, MethodEnd } from '../../coordinator/consensus/method.js';
import { pooledRung } from '../../coordinator/consensus/pooled-rung.js';
import type { ConsensusProblem } from '../../coordinator/consensus/problem.js';
import { proximalRung } from '../../coordinator/consensus/proximal-rung.js';
import { sketchedRung } from '../../coordinator/consensus/sketched-rung.js';
import { clipToBounds, penaltyValue } from '../../numerics/penalty.js';
import type { LossKind } from '../../protocol/specification/types.js';
import { type LocalSolver, localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import type { Loss } from '../../worker/losses/loss.js';
import { driveMethods, must } from '../support/method-driver.js';
import { balancing } from './balancing.js';
import type { BaselineProblem, BaselineRun } from './baseline.js';
import { gradient } from './gradient.js';
import { type BenchProblem, makeProblem } from './problems.js';
import { textbook } from './textbook.js';

const RUNGS = [
  'pooled',
  'curvature',
  'curvature-first',
  'proximal',
  'sketched-8',
  'sketched-1',
  'proximal-only',
] as const;
/** What the rungs are measured against; uncertified. */
const BASELINES = { balancing, gradient, textbook } as const satisfies Record<
  string,
  (problem: BaselineProblem) => BaselineRun
>;
type BaselineName = keyof typeof BASELINES;
const BASELINE_NAMES = Object.keys(BASELINES) as BaselineName[];
export const METHODS: readonly MethodName[] = [...RUNGS, ...BASELINE_NAMES];
export type MethodName = (typeof RUNGS)[number] | BaselineName;

/** Baselines are not certified: nothing of theirs can fail. */
export const isBaseline = (method: MethodName): method is BaselineName => Object.hasOwn(BASELINES, method);

const TOLERANCES = { '1e-6': 1e-6, '1e-8': 1e-8 } as const;
/** Curvature matrices a site lets leave by default. */
const DEFAULT_BUDGET = 3;
/** Most columns for which the sketched rung is measured: beyond, no policy's directions are enough. */
const SKETCHED_COLUMNS_MOST = 200;

export interface Row {
  readonly problem: string;
  readonly method: MethodName;
  /** Rounds to a certified relative gap (uncertified for the baselines), set-up and certificate included. */
  readonly rounds: Readonly<Record<keyof typeof TOLERANCES, number | null>>;
  /** Numbers one site sends and receives on the way to 1e-8. */
  readonly numbersUp: number | null;
  readonly numbersDown: number | null;
  /** True relative gap at the point certified to 1e-8, against the pooled solve. */
  readonly trueGap: number | null;
  /** Why a rung did not end `solved`. */
  readonly failure: string | null;
  /** True where a certified point's true gap was above the tolerance certified. */
  readonly contradicted: boolean;
}

/** All methods that take this problem. The optimum comes from a pooled high-accuracy solve, checked by its subgradient. */
export function measureProblem(name: string): Row[] {
  const problem = makeProblem(name);
  const loss = benchLoss(problem.loss);
  const sites = problem.shards.map((shard) => localSolver(shard, loss));
  const pooled = localSolver(problem.pooled, loss);
  const optimum = pooledOptimum(problem, pooled);
  const rung = (method: MethodName, make: (problem: ConsensusProblem) => Method, budget: number): Row =>
    measureRung(problem, method, make, budget, sites, pooled, optimum);
  return [
    ...(problem.loss === 'squared' ? [rung('pooled', pooledRung, DEFAULT_BUDGET)] : []),
    rung('curvature', curvatureRung, Number.POSITIVE_INFINITY),
    rung('curvature-first', firstTrialOnly, Number.POSITIVE_INFINITY),
    rung('proximal', proximalRung, DEFAULT_BUDGET),
    ...(problem.p <= SKETCHED_COLUMNS_MOST
      ? [rung('sketched-8', sketchedWith(8), 0), rung('sketched-1', sketchedWith(1), 0)]
      : []),
    rung('proximal-only', proximalRung, 0),
    ...BASELINE_NAMES.map((name) => measureBaseline(name, problem, sites, optimum)),
  ];
}

/** The curvature rung with curvature at the first trial point of a round alone. */
const firstTrialOnly = (problem: ConsensusProblem): Method =>
  curvatureRung({ ...problem, trialMatrices: 'first' });

/** The sketched rung with so many directions a round, and no limit on them in all. */
export const sketchedWith =
  (columns: number) =>
  (problem: ConsensusProblem): Method =>
    sketchedRung({ ...problem, sketch: { columns, columnsMost: Number.POSITIVE_INFINITY } });

/** The loss of a problem; Huber's with threshold 1, in units of the noise. */
export const benchLoss = (kind: LossKind): Loss =>
  lossOf(kind === 'huber' ? { kind, threshold: 1 } : { kind });

export function consensusProblem(problem: BenchProblem, tolerance: number, budget: number): ConsensusProblem {
  return {
    p: problem.p,
    siteWeights: problem.shards.map((shard) => shard.rowCount / shard.rowCountTotal),
    penalty: problem.penalty,
    start: clipToBounds(problem.penalty, problem.start),
    tolerance,
    roundsMost: 500,
    quadratic: problem.loss === 'squared',
    separatedBelow: problem.loss === 'logistic' ? Math.LN2 / problem.pooled.rowCount : null,
    curvatureMayVanish: problem.loss === 'huber',
    curvatureMost: budget,
    trialMatrices: 'all',
    sketch: { columns: 0, columnsMost: 0 },
    seed: 1,
  };
}

/** F*, to about fifteen digits: one site with all rows, curvature allowed. */
export function pooledOptimum(problem: BenchProblem, pooled: LocalSolver): number {
  const alone = { ...consensusProblem(problem, 1e-14, Number.POSITIVE_INFINITY), siteWeights: [1] };
  const [end] = driveMethods([curvatureRung(alone)], [pooled]).ends;
  if (end.outcome !== 'solved' || end.certificate === null)
    throw new Error(`${problem.name}: the pooled solve ended ${end.outcome}: ${end.reason}`);
  return end.loss + end.penalty;
}

function measureRung(
  problem: BenchProblem,
  method: MethodName,
  make: (problem: ConsensusProblem) => Method,
  budget: number,
  sites: readonly LocalSolver[],
  pooled: LocalSolver,
  optimum: number,
): Row {
  const gapOf = (end: MethodEnd): number => {
    const value = must(pooled.evaluate(end.z, 'value')).value + penaltyValue(problem.penalty, end.z);
    return (value - optimum) / Math.max(Math.abs(optimum), 1e-12);
  };
  const runs = Object.entries(TOLERANCES).map(([key, tolerance]) => {
    const driven = driveMethods([make(consensusProblem(problem, tolerance, budget))], sites);
    const [end] = driven.ends;
    return { key, tolerance, driven, end, solved: end.outcome === 'solved', gap: gapOf(end) };
  });
  const fine = runs[runs.length - 1];
  return {
    problem: problem.name,
    method,
    rounds: {
      '1e-6': runs[0].solved ? runs[0].driven.rounds : null,
      '1e-8': fine.solved ? fine.driven.rounds : null,
    },
    numbersUp: fine.driven.traffic.up,
    numbersDown: fine.driven.traffic.down,
    trueGap: fine.gap,
    failure: runs.find((run) => !run.solved)?.end.outcome ?? null,
    contradicted: runs.some((run) => run.solved && run.gap > run.tolerance),
  };
}

function measureBaseline(
  method: BaselineName,
  problem: BenchProblem,
  sites: readonly LocalSolver[],
  optimum: number,
): Row {
  const { siteWeights } = consensusProblem(problem, 0, 0);
  const tolerances = Object.values(TOLERANCES);
  const { penalty, start } = problem;
  const run = BASELINES[method]({ sites, siteWeights, penalty, start, optimum, tolerances });
  const [six, eight] = run.rounds;
  return {
    problem: problem.name,
    method,
    rounds: { '1e-6': six, '1e-8': eight },
    numbersUp: eight === null ? null : run.numbersUp,
    numbersDown: eight === null ? null : run.numbersDown,
    trueGap: null,
    failure: eight === null ? 'round-limit' : null,
    contradicted: false,
  };
}
