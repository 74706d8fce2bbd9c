import { runawayColumns } from '../../numerics/determined.js';
import { leastSubgradient, type Penalty, penaltyValue } from '../../numerics/penalty.js';
import { estimatedCertificate } from './certificate.js';
import { endAt } from './endings.js';
import { separatedColumns } from './existence.js';
import type { Certificate, MethodAsk, MethodEnd, Progress, SiteAnswers } from './method.js';
import { evaluate, type PooledEvaluation, required, siteGradients } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import type { Residuals } from './residuals.js';
import { type Finish, secondOrderFinish } from './second-order-finish.js';
import type { SiteModels } from './site-models.js';

/**
 * Residuals at which a certificate is asked: for an estimate; for a second-order finish, which needs only its region of
 * contraction; for the same where models lead (primal residual alone). And their shrinkage after one that fails.
 */
export const TRIGGERS = { estimate: 1e-3, finish: 1e-2, led: 0.1 } as const;
const SHRINKAGE = { estimate: 4, finish: 10, coarse: 2 } as const;

/** The gap is about the square of the residual: a coarse tolerance may hold long before the usual trigger. */
export const estimateTrigger = ({ tolerance }: Pick<ConsensusProblem, 'tolerance'>): number =>
  Math.max(TRIGGERS.estimate, Math.sqrt(tolerance));

/** Relative gap at which a model step is worth an estimate of its own. */
const NEAR = 1e-3;

/** Where the proximal iteration stands beside its vectors. */
export interface Standing {
  /** D, positive: the pooled diagonal curvature at z₀. */
  readonly startDiagonal: Float64Array;
  /** F(z₀). */
  readonly startObjective: number;
  rounds: number;
  trigger: number;
  matricesLeft: number;
  /** Some curvature has been measured already, and found to have no aliased columns. */
  curvatureSeen: boolean;
  residuals: Residuals | null;
  /** What the models promise for the step to z, relative; null where none lead. */
  gapGuess: number | null;
  objective: number;
  /** The least objective measured, and the point with every site's gradient there; null while that is z₀. */
  bestObjective: number;
  best: { readonly z: Float64Array; readonly gradients: readonly Float64Array[] } | null;
  certificate: Certificate | null;
  /** Models of the sites, learned from their proximal points; null where they would be too large to keep. */
  models: SiteModels | null;
}

/** Where a method begins, before its first round: F(z₀) and D are known, nothing else. */
export const standingFrom = (
  problem: ConsensusProblem,
  startDiagonal: Float64Array,
  objective: number,
  models: SiteModels | null,
): Standing => ({
  startDiagonal,
  startObjective: objective,
  rounds: 0,
  trigger: problem.curvatureMost > 0 ? TRIGGERS.finish : estimateTrigger(problem),
  matricesLeft: problem.curvatureMost,
  curvatureSeen: false,
  residuals: null,
  gapGuess: null,
  objective,
  bestObjective: objective,
  best: null,
  certificate: null,
  models,
});

/**
 * A certificate round at z, or the second-order finish from z while curvature is left to spend. Returns the end, or,
 * after a finish that did not certify, the best point it measured.
 */
export function* certify(
  problem: ConsensusProblem,
  standing: Standing,
  z: Float64Array,
): Generator<MethodAsk, { readonly end: MethodEnd | null; readonly restart: Finish | null }, SiteAnswers> {
  if (standing.matricesLeft === 0) {
    standing.trigger /= standing.trigger > TRIGGERS.estimate ? SHRINKAGE.coarse : SHRINKAGE.estimate;
    return { end: estimate(problem, standing, z, yield* askEstimate(standing, z)), restart: null };
  }
  standing.trigger /= SHRINKAGE.finish;
  const finish = yield* finishFrom(problem, standing, z);
  if (standing.matricesLeft === 0) standing.trigger = estimateTrigger(problem);
  const end = endOfFinish(problem, standing, finish) ?? (yield* beyondFinish(problem, standing, finish));
  return { end, restart: end === null ? finish : null };
}

/** A certificate round at z that spends nothing, for an iteration whose residuals tell too little. */
export function* look(
  problem: ConsensusProblem,
  standing: Standing,
  z: Float64Array,
): Generator<MethodAsk, MethodEnd | null, SiteAnswers> {
  return estimate(problem, standing, z, yield* askEstimate(standing, z));
}

/** The last round is a certificate round at z, so that even an unsolved run says where it stands. */
export function* lastCertificate(
  problem: ConsensusProblem,
  standing: Standing,
  z: Float64Array,
): Generator<MethodAsk, MethodEnd, SiteAnswers> {
  const answers = yield* askEstimate(standing, z);
  const solved = estimate(problem, standing, z, answers);
  return solved ?? ending(problem, standing, 'round-limit', z, answers.points[0].value, null);
}

function* askEstimate(
  standing: Standing,
  z: Float64Array,
): Generator<MethodAsk, PooledEvaluation, SiteAnswers> {
  standing.rounds++;
  return yield* evaluate(
    [{ point: z, want: 'diagonal' }],
    null,
    progressOf(standing, 'gradients at z', null),
  );
}

function estimate(
  problem: ConsensusProblem,
  standing: Standing,
  z: Float64Array,
  answers: PooledEvaluation,
): MethodEnd | null {
  const g = problem.penalty;
  const [at] = answers.points;
  const gradient = required(at.gradient, 'gradient');
  const diagonal = required(at.diagonal, 'diagonal');
  standing.objective = at.value + penaltyValue(g, z);
  standing.models?.learn(
    problem.siteWeights.map(() => z),
    siteGradients(answers),
  );
  const learned = standing.models?.stepFrom(z, gradient) ?? null;
  const { objective } = standing;
  standing.certificate = estimatedCertificate(
    g,
    z,
    gradient,
    diagonal,
    learned?.decrement ?? null,
    objective,
    standing.startObjective,
  );
  const ended = (outcome: 'solved' | 'unbounded', columns: readonly number[]): MethodEnd => ({
    ...ending(problem, standing, outcome, z, at.value, null),
    reason: outcome === 'solved' ? null : 'separable',
    columnsAtFault: columns,
  });
  const separated = separatedColumns(problem, z, at.value);
  if (separated.length > 0) return ended('unbounded', separated);
  // what is not a number certifies nothing
  if (!(standing.certificate.relativeGap <= problem.tolerance)) return null;
  // learned models know slopes along which the diagonal sees curvature, but lag where it has just gone
  const steps = [diagonalStep(g, z, gradient, diagonal), ...(learned === null ? [] : [learned])];
  const runaway = problem.curvatureMayVanish
    ? []
    : (steps
        .map(({ direction, bend }) => runawayColumns(direction, bend, standing.startDiagonal))
        .find((columns) => columns.length > 0) ?? []);
  return ended(runaway.length === 0 ? 'solved' : 'unbounded', runaway);
}

/** The step under the diagonal curvature alone. */
function diagonalStep(g: Penalty, z: Float64Array, gradient: Float64Array, diagonal: Float64Array) {
  const bends = diagonal.map((value, j) => Math.max(value + g.l2[j], 1e-300));
  const direction = leastSubgradient(g, z, gradient).map((slope, j) => -slope / bends[j]);
  return { direction, bend: direction.reduce((sum, value, j) => sum + bends[j] * value * value, 0) };
}

function* finishFrom(
  problem: ConsensusProblem,
  standing: Standing,
  z: Float64Array,
): Generator<MethodAsk, Finish, SiteAnswers> {
  const { finish, rounds } = yield* secondOrderFinish(
    problem,
    z,
    { startDiagonal: standing.startDiagonal, budget: standing.matricesLeft, first: !standing.curvatureSeen },
    (purpose, gap, objective) => ({
      ...progressOf(standing, purpose, gap),
      objective: objective ?? standing.objective,
    }),
  );
  standing.rounds += rounds;
  standing.curvatureSeen = true;
  standing.matricesLeft -= finish.matricesSpent;
  standing.objective = finish.loss + penaltyValue(problem.penalty, finish.z);
  standing.certificate = finish.certificate;
  if (standing.objective <= standing.bestObjective) {
    standing.bestObjective = standing.objective;
    standing.best = { z: finish.z, gradients: siteGradients(finish.measured) };
  }
  return finish;
}

/**
 * The last matrix did not certify its own point, but the step it gives is far nearer to the optimum: gradients there
 * may make an estimate that holds.
 */
function* beyondFinish(
  problem: ConsensusProblem,
  standing: Standing,
  finish: Finish,
): Generator<MethodAsk, MethodEnd | null, SiteAnswers> {
  const { beyond, certificate } = finish;
  const near = certificate !== null && certificate.relativeGap <= NEAR;
  if (standing.matricesLeft > 0 || beyond === null || !near) return null;
  return estimate(problem, standing, beyond, yield* askEstimate(standing, beyond));
}

function endOfFinish(problem: ConsensusProblem, standing: Standing, finish: Finish): MethodEnd | null {
  const { stands, z, loss, curvature } = finish;
  const separated = separatedColumns(problem, z, loss);
  const flaw = separated.length > 0 ? { reason: 'separable' as const, columns: separated } : finish.flaw;
  if (flaw !== null) {
    const outcome = flaw.reason === 'separable' ? 'unbounded' : 'refused';
    const ended = ending(problem, standing, outcome, z, loss, curvature);
    return { ...ended, reason: flaw.reason, columnsAtFault: flaw.columns };
  }
  return stands ? ending(problem, standing, 'solved', z, loss, curvature) : null;
}

export function ending(
  problem: ConsensusProblem,
  standing: Standing,
  outcome: MethodEnd['outcome'],
  z: Float64Array,
  loss: number,
  curvature: Float64Array | null,
): MethodEnd {
  const { certificate, rounds } = standing;
  const end = { outcome, reason: null, certificate, curvature, rounds, rung: 'proximal' } as const;
  return endAt(problem, { z, loss }, end);
}

/** For the round log. Near an optimum the gap is quadratic in the residual: a guess where no model gives a better one. */
export function progressOf(standing: Standing | null, purpose: string, gap: number | null): Progress {
  const residuals = standing?.residuals ?? null;
  const worst = residuals === null ? null : Math.max(residuals.primal, residuals.dual);
  return {
    rung: 'proximal',
    purpose,
    primalResidual: residuals?.primal ?? null,
    dualResidual: residuals?.dual ?? null,
    relativeGap: gap ?? standing?.gapGuess ?? (worst === null ? null : worst * worst),
    gapMeasured: gap !== null,
    objective: standing?.objective ?? null,
  };
}
