import { curvatureRung } from '../../coordinator/consensus/curvature-rung.js';
import type { Certificate, Method, MethodEnd } from '../../coordinator/consensus/method.js';
import { pooledRung } from '../../coordinator/consensus/pooled-rung.js';
import type { ConsensusProblem } from '../../coordinator/consensus/problem.js';
import { proximalRung } from '../../coordinator/consensus/proximal-rung.js';
import { type LocalSolver, localSolver } from '../../worker/local/local-solver.js';
import type { Loss } from '../../worker/losses/loss.js';
import { driveMethods, SiteFailure } from '../support/method-driver.js';
import { benchLoss, consensusProblem } from './measure.js';
import type { BenchProblem } from './problems.js';
import { objectiveByRows, type Reference, referenceOptimum } from './reference-optimum.js';

export const FUZZ_TOLERANCE = 1e-8;

export const FUZZ_RUNGS = {
  pooled: { make: pooledRung, budget: 3 },
  curvature: { make: curvatureRung, budget: Number.POSITIVE_INFINITY },
  proximal: { make: proximalRung, budget: 3 },
  'proximal-only': { make: proximalRung, budget: 0 },
} as const satisfies Record<string, { make: (problem: ConsensusProblem) => Method; budget: number }>;
export type FuzzRung = keyof typeof FUZZ_RUNGS;

/**
 * How a run ended: `certified`; `named` (an outcome with its reason, without a certificate that it holds to);
 * `contradicted` (a certified point farther from the optimum than certified, or certified where there is none);
 * `estimate` (the same, where the certificate was called an estimate); `thrown`; `unnamed`.
 */
export type Verdict = 'certified' | 'named' | 'contradicted' | 'estimate' | 'thrown' | 'unnamed';

export interface FuzzRow {
  readonly problem: string;
  readonly rung: FuzzRung;
  readonly verdict: Verdict;
  readonly outcome: string;
  readonly reason: string | null;
  readonly rounds: number | null;
  readonly certificate: Certificate['kind'] | null;
  /** True relative gap of the point stood by, against the best point anyone found. */
  readonly gap: number | null;
  readonly nature: Reference['nature'];
  /** The reference is itself within a tenth of the tolerance, by its least subgradient. */
  readonly verified: boolean;
}

/** One problem on every rung that takes it. */
export function fuzzProblem(problem: BenchProblem): FuzzRow[] {
  const loss = benchLoss(problem.loss);
  const sites = problem.shards.map((shard) => localSolver(shard, loss));
  const reference = referenceOptimum(problem, localSolver(problem.pooled, loss), loss);
  const rungs = (Object.keys(FUZZ_RUNGS) as FuzzRung[]).filter(
    (rung) => rung !== 'pooled' || problem.loss === 'squared',
  );
  const runs = rungs.map((rung) => ({ rung, ...attempt(problem, rung, sites) }));
  const objectives = runs.map(({ end }) =>
    end === null ? Number.POSITIVE_INFINITY : objectiveByRows(problem, loss, end.z),
  );
  const best = Math.min(reference.objective, ...objectives);
  const size = scaleOf(problem, loss, best);
  const verified = reference.within <= 0.1 * FUZZ_TOLERANCE * size;
  return runs.map(({ rung, end, failure }, k) => {
    const gap = (objectives[k] - best) / size;
    return {
      problem: problem.name,
      rung,
      verdict: end === null ? verdictOfFailure(failure) : verdictOf(end, gap, reference),
      outcome: end?.outcome ?? (failure instanceof SiteFailure ? 'refused' : 'thrown'),
      reason: end === null ? String(failure) : end.reason,
      rounds: end?.rounds ?? null,
      certificate: end?.certificate?.kind ?? null,
      gap: Number.isFinite(gap) ? gap : null,
      nature: reference.nature,
      verified,
    };
  });
}

/** |F*|, or what rounding makes of the objective at the start where the optimum is exactly zero. */
function scaleOf(problem: BenchProblem, loss: Loss, best: number): number {
  const start = problem.start.map((value, j) =>
    Math.min(Math.max(value, problem.penalty.lower[j]), problem.penalty.upper[j]),
  );
  return Math.max(Math.abs(best), 1e-12 * Math.abs(objectiveByRows(problem, loss, start)), 1e-300);
}

function attempt(
  problem: BenchProblem,
  rung: FuzzRung,
  sites: readonly LocalSolver[],
): { end: MethodEnd | null; failure: unknown } {
  const { make, budget } = FUZZ_RUNGS[rung];
  try {
    const method = make(consensusProblem(problem, FUZZ_TOLERANCE, budget));
    return { end: driveMethods([method], sites).ends[0], failure: null };
  } catch (failure) {
    return { end: null, failure };
  }
}

/** A site that cannot answer refuses, and the run ends with its reason. */
const verdictOfFailure = (failure: unknown): Verdict => (failure instanceof SiteFailure ? 'named' : 'thrown');

function verdictOf(end: MethodEnd, gap: number, reference: Reference): Verdict {
  if (end.outcome === 'solved') {
    const wrong = reference.nature === 'separable' || !(gap <= FUZZ_TOLERANCE);
    if (!wrong && end.certificate !== null) return 'certified';
    return end.certificate?.kind === 'estimate' ? 'estimate' : 'contradicted';
  }
  const namesAbsence = end.reason === 'separable' || end.reason === 'rank-deficient';
  if (namesAbsence && end.reason !== reference.nature) return 'contradicted';
  return end.outcome !== 'broken' && (end.outcome === 'round-limit' || end.reason !== null)
    ? 'named'
    : 'unnamed';
}
