import { curvatureRung } from '../../coordinator/consensus/curvature-rung.js';
import { lateCurvatureRung } from '../../coordinator/consensus/late-curvature-rung.js';
import type { LateBarrier, LateMethod } from '../../coordinator/consensus/late-method.js';
import { lateProximalRung } from '../../coordinator/consensus/late-proximal-rung.js';
import type { Method, MethodEnd } from '../../coordinator/consensus/method.js';
import type { ConsensusProblem } from '../../coordinator/consensus/problem.js';
import { proximalRung } from '../../coordinator/consensus/proximal-rung.js';
import { penaltyValue } from '../../numerics/penalty.js';
import { seededRandom } from '../../numerics/random.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { driveMethods, must } from '../support/method-driver.js';
import { simulateLate } from './late-simulation.js';
import { benchLoss, consensusProblem, pooledOptimum } from './measure.js';
import { makeProblem } from './problems.js';
import {
  latencyOf,
  SCENARIOS,
  type Scenario,
  surveyAgesMs,
  synchronousTimeMs,
} from './straggler-scenarios.js';
import { quantile } from './summary.js';

const RUNGS = {
  curvature: { synchronous: curvatureRung, late: lateCurvatureRung, matrices: Number.POSITIVE_INFINITY },
  proximal: { synchronous: proximalRung, late: lateProximalRung, matrices: 3 },
} as const satisfies Record<
  string,
  {
    synchronous: (problem: ConsensusProblem) => Method;
    late: (problem: ConsensusProblem, barrier: LateBarrier) => LateMethod;
    matrices: number;
  }
>;
export type StragglerRung = keyof typeof RUNGS;
export const STRAGGLER_RUNGS = Object.keys(RUNGS) as StragglerRung[];

export const TOLERANCES = [1e-6, 1e-8] as const;
/** One answer may be missing; heavy tails make two of eight late as a rule. */
const QUORUM: Record<Scenario, number> = {
  'slow, known': 7,
  'slow, unknown': 7,
  'heavy tails': 6,
  absent: 7,
  none: 7,
};
const OLDEST = 20;

/** One problem, rung, tolerance and scenario over all seeds; times in units of the run without a straggler. */
export interface StragglerRow {
  readonly problem: string;
  readonly rung: StragglerRung;
  readonly tolerance: number;
  readonly scenario: Scenario;
  readonly synchronousRounds: number;
  /** Medians over the seeds, of times over the synchronous run's without a straggler. */
  readonly synchronous: number;
  readonly partial: number;
  /** Median, and nine of ten, of partial over synchronous under the same scenario. */
  readonly ratio: number;
  readonly ratioNineOfTen: number;
  /** Answers of the slow or absent site: median and most. */
  readonly answers: number;
  readonly answersMost: number;
  readonly unsolved: number;
  /** Certified points whose true gap is above the tolerance. */
  readonly contradicted: number;
}

export function measureStragglers(name: string, seeds: number): StragglerRow[] {
  const problem = makeProblem(name);
  const loss = benchLoss(problem.loss);
  const sites = problem.shards.map((shard) => localSolver(shard, loss));
  const pooled = localSolver(problem.pooled, loss);
  const optimum = pooledOptimum(problem, pooled);
  const gapOf = ({ z }: MethodEnd): number =>
    (must(pooled.evaluate(z, 'value')).value + penaltyValue(problem.penalty, z) - optimum) /
    Math.max(Math.abs(optimum), 1e-12);
  return STRAGGLER_RUNGS.flatMap((rung) =>
    TOLERANCES.flatMap((tolerance) => {
      const { synchronous, late, matrices } = RUNGS[rung];
      const consensus = consensusProblem(problem, tolerance, matrices);
      const synchronousRounds = driveMethods([synchronous(consensus)], sites).rounds;
      return SCENARIOS.map((scenario): StragglerRow => {
        const runs = Array.from({ length: seeds }, (_, k) => {
          const random = seededRandom(k + 1);
          const odd = random.integer(sites.length);
          const barrier = {
            quorum: QUORUM[scenario],
            oldest: OLDEST,
            agesMs: surveyAgesMs(scenario, odd, sites.length),
          };
          const latency = latencyOf(scenario, odd, random);
          const run = simulateLate(late(consensus, barrier), sites, problem.penalty, latency);
          const solved = run.end.outcome === 'solved';
          return {
            partial: run.timeMs,
            synchronous: synchronousTimeMs(synchronousRounds, sites.length, latency),
            base: synchronousTimeMs(synchronousRounds, sites.length, latencyOf('none', odd, random)),
            answers: run.answers[odd],
            solved,
            contradicted: solved && gapOf(run.end) > tolerance,
          };
        });
        const middle = (values: readonly number[]): number => quantile(values, 0.5);
        const ratios = runs.map((run) => run.partial / run.synchronous);
        const answers = runs.map((run) => run.answers);
        return {
          problem: name,
          rung,
          tolerance,
          scenario,
          synchronousRounds,
          synchronous: middle(runs.map((run) => run.synchronous / run.base)),
          partial: middle(runs.map((run) => run.partial / run.base)),
          ratio: middle(ratios),
          ratioNineOfTen: quantile(ratios, 0.9),
          answers: middle(answers),
          answersMost: Math.max(...answers),
          unsolved: runs.filter((run) => !run.solved).length,
          contradicted: runs.filter((run) => run.contradicted).length,
        };
      });
    }),
  );
}
