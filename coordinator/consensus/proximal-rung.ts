import { Acceleration } from './acceleration.js';
import { estimatedCertificate } from './certificate.js';
import { curvatureRung } from './curvature-rung.js';
import { runawayColumns } from './existence.js';
import type { Certificate, Method, MethodAsk, MethodEnd, Progress, SiteAnswers } from './method.js';
import { flooredDiagonal } from './metric.js';
import { leastSubgradient, penaltyValue } from './penalty.js';
import { evaluate, type PooledEvaluation, required } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import { balancingFactor, normalisedResiduals, type Residuals } from './residuals.js';
import { type Finish, secondOrderFinish } from './second-order-finish.js';
import { zStepDiagonal } from './z-step.js';

/** Over-relaxation α (Eckstein and Bertsekas 1992). */
const RELAXATION = 1.6;
/** Residual at which a certificate round is asked, and its shrinkage after each that fails. */
const TRIGGER_ESTIMATE = 1e-3;
const TRIGGER_ESTIMATE_SHRINK = 4;
/** The same where curvature may leave: the second-order finish needs only its region of contraction. */
const TRIGGER_FINISH = 1e-2;
const TRIGGER_FINISH_SHRINK = 10;

/**
 * The `proximal` rung: consensus ADMM (Boyd, Parikh, Chu, Peleato, Eckstein 2011, §7) in its Douglas-Rachford form,
 * with the metric M_i = c · w_i · D, D the pooled diagonal curvature at z₀; residual balancing at the start, Anderson
 * acceleration after; and, within the budget of curvature matrices, a second-order finish.
 *
 *     z   = argmin g(z) + ½ zᵀ(Σ M_i)z − (Σ M_i s_i)ᵀz          consensus step
 *     u_i = s_i − z                                             scaled duals
 *     x_i = argmin φ_i(x) + ½ (x − v_i)ᵀM_i(x − v_i)            at the sites, v_i = z − u_i
 *     s_i ← s_i + α (x_i − z)
 */
export function* proximalRung(problem: ConsensusProblem): Method {
  // the model of a squared loss is the function: one matrix, anywhere, solves it
  if (problem.quadratic && problem.curvatureMost > 0)
    return { ...(yield* curvatureRung(problem)), rung: 'proximal' as const };
  const state = yield* setUp(problem);
  const acceleration = new Acceleration();
  let scale = 1;
  let s: Float64Array[] = problem.siteWeights.map(() => problem.start);
  let x: Float64Array[] = problem.siteWeights.map(() => problem.start);
  let zOld: Float64Array | null = null;
  for (let k = 0; ; k++) {
    const z = consensusStep(problem, state.diagonal, scale, s);
    if (zOld !== null) {
      const scales = problem.siteWeights.map((weight) => scale * weight);
      const duals = s.map((own) => own.map((value, j) => value - z[j]));
      const residuals = normalisedResiduals(x, z, zOld, duals, scales, state.diagonal);
      state.residuals = residuals;
      if (Math.max(residuals.primal, residuals.dual) <= state.trigger) {
        const ended = yield* certify(problem, state, z);
        if (ended !== null) return ended;
        if (state.restart !== null) {
          // every site's gradient is known at the finish's best point: take z and the exact duals from there
          const { restart } = state;
          s = warmStart(problem, state.diagonal, scale, restart);
          x = x.map(() => restart.z);
          state.restart = null;
          acceleration.clear();
          zOld = null;
          continue;
        }
      }
      const factor = balancingFactor(residuals, k);
      if (factor !== 1) {
        scale *= factor;
        s = duals.map((own) => own.map((value, j) => z[j] + value / factor));
        acceleration.clear();
      }
    }
    if (state.rounds >= problem.roundsMost - 1) return yield* roundLimit(problem, state, z);
    const centers = s.map((own) => own.map((value, j) => 2 * z[j] - value));
    x = yield* askProximal(problem, state, scale, centers, x);
    s = relax(problem, state.diagonal, scale, s, x, z, acceleration);
    zOld = z;
  }
}

interface State {
  /** D, positive, length p. */
  readonly diagonal: Float64Array;
  rounds: number;
  trigger: number;
  matricesLeft: number;
  residuals: Residuals | null;
  restart: Finish | null;
  objective: number | null;
  certificate: Certificate | null;
}

function* setUp(problem: ConsensusProblem): Generator<MethodAsk, State, SiteAnswers> {
  const at = yield* evaluate([{ point: problem.start, want: 'diagonal' }], null, {
    rung: 'proximal',
    purpose: 'gradient and diagonal curvature at the start',
    primalResidual: null,
    dualResidual: null,
    relativeGap: null,
    gapMeasured: false,
    objective: null,
  });
  return {
    diagonal: flooredDiagonal(required(at.points[0].diagonal, 'diagonal')),
    rounds: 1,
    trigger: problem.curvatureMost > 0 ? TRIGGER_FINISH : TRIGGER_ESTIMATE,
    matricesLeft: problem.curvatureMost,
    residuals: null,
    restart: null,
    objective: at.points[0].value + penaltyValue(problem.penalty, problem.start),
    certificate: null,
  };
}

function consensusStep(
  problem: ConsensusProblem,
  diagonal: Float64Array,
  scale: number,
  s: readonly Float64Array[],
): Float64Array {
  const metric = new Float64Array(problem.p);
  const b = new Float64Array(problem.p);
  s.forEach((own, i) => {
    for (let j = 0; j < problem.p; j++) {
      const m = scale * problem.siteWeights[i] * diagonal[j];
      metric[j] += m;
      b[j] += m * own[j];
    }
  });
  return zStepDiagonal(problem.penalty, metric, b);
}

function* askProximal(
  problem: ConsensusProblem,
  state: State,
  scale: number,
  centers: readonly Float64Array[],
  starts: readonly Float64Array[],
): Generator<MethodAsk, Float64Array[], SiteAnswers> {
  state.rounds++;
  const answers = yield {
    kind: 'proximal',
    centers,
    scales: problem.siteWeights.map((weight) => scale * weight),
    diagonal: state.diagonal,
    starts,
    progress: progressOf(state, 'proximal points', null),
  };
  if (answers.kind !== 'proximal') throw new TypeError(`a proximal ask was answered with ${answers.kind}`);
  return [...answers.points];
}

/** s_i ← s_i + α(x_i − z), accelerated in the norm of the metric over the stacked sites. */
function relax(
  problem: ConsensusProblem,
  diagonal: Float64Array,
  scale: number,
  s: readonly Float64Array[],
  x: readonly Float64Array[],
  z: Float64Array,
  acceleration: Acceleration,
): Float64Array[] {
  const p = problem.p;
  const root = diagonal.map((value) => Math.sqrt(scale * value));
  const rootWeights = problem.siteWeights.map(Math.sqrt);
  const image = new Float64Array(p * s.length);
  const residual = new Float64Array(p * s.length);
  s.forEach((own, i) => {
    for (let j = 0; j < p; j++) {
      const step = RELAXATION * (x[i][j] - z[j]);
      const m = rootWeights[i] * root[j];
      residual[i * p + j] = m * step;
      image[i * p + j] = m * (own[j] + step);
    }
  });
  const next = acceleration.next(image, residual);
  return s.map((_, i) =>
    Float64Array.from({ length: p }, (_, j) => next[i * p + j] / (rootWeights[i] * root[j])),
  );
}

/** A certificate round at z, or the second-order finish from z where curvature is left to spend. */
function* certify(
  problem: ConsensusProblem,
  state: State,
  z: Float64Array,
): Generator<MethodAsk, MethodEnd | null, SiteAnswers> {
  if (state.matricesLeft > 0) {
    state.trigger /= TRIGGER_FINISH_SHRINK;
    const ended = yield* tryFinish(problem, state, z);
    if (state.matricesLeft === 0) state.trigger = Math.min(state.trigger, TRIGGER_ESTIMATE);
    return ended;
  }
  state.trigger /= TRIGGER_ESTIMATE_SHRINK;
  return estimate(problem, state, z, yield* askCertificate(state, z));
}

function* askCertificate(state: State, z: Float64Array): Generator<MethodAsk, PooledEvaluation, SiteAnswers> {
  state.rounds++;
  return yield* evaluate([{ point: z, want: 'diagonal' }], null, progressOf(state, 'certificate', null));
}

function estimate(
  problem: ConsensusProblem,
  state: State,
  z: Float64Array,
  answers: PooledEvaluation,
): MethodEnd | null {
  const g = problem.penalty;
  const [at] = answers.points;
  const objective = at.value + penaltyValue(g, z);
  const gradient = required(at.gradient, 'gradient');
  const diagonal = required(at.diagonal, 'diagonal');
  const certificate = estimatedCertificate(g, z, gradient, diagonal, objective);
  state.objective = objective;
  state.certificate = certificate;
  if (certificate.relativeGap > problem.tolerance) return null;
  const step = leastSubgradient(g, z, gradient).map(
    (slope, j) => -slope / Math.max(diagonal[j] + g.l2[j], 1e-300),
  );
  const bend = step.reduce((sum, value, j) => sum + (diagonal[j] + g.l2[j]) * value * value, 0);
  const runaway = runawayColumns(step, bend, state.diagonal);
  const ended = ending(problem, state, 'solved', z, at.value, certificate, null);
  return runaway.length === 0
    ? ended
    : { ...ended, outcome: 'unbounded', reason: 'separable', columnsAtFault: runaway };
}

function* tryFinish(
  problem: ConsensusProblem,
  state: State,
  z: Float64Array,
): Generator<MethodAsk, MethodEnd | null, SiteAnswers> {
  const { finish, rounds } = yield* secondOrderFinish(
    problem,
    z,
    state.diagonal,
    state.matricesLeft,
    (purpose, gap, objective) => ({
      ...progressOf(state, purpose, gap),
      objective: objective ?? state.objective,
    }),
  );
  state.rounds += rounds;
  state.matricesLeft -= finish.matricesSpent;
  state.objective = finish.loss + penaltyValue(problem.penalty, finish.z);
  state.certificate = finish.certificate;
  if (finish.flaw !== null) {
    const outcome = finish.flaw.reason === 'separable' ? 'unbounded' : 'refused';
    const ended = ending(
      problem,
      state,
      outcome,
      finish.z,
      finish.loss,
      finish.certificate,
      finish.curvature,
    );
    return { ...ended, reason: finish.flaw.reason, columnsAtFault: finish.flaw.columns };
  }
  if (finish.certificate !== null && finish.certificate.relativeGap <= problem.tolerance)
    return ending(problem, state, 'solved', finish.z, finish.loss, finish.certificate, finish.curvature);
  state.restart = finish;
  return null;
}

/** s_i = z − M_i⁻¹∇φ_i(z): with the exact duals at z, the consensus step returns to z's neighbourhood at once. */
function warmStart(
  problem: ConsensusProblem,
  diagonal: Float64Array,
  scale: number,
  finish: Finish,
): Float64Array[] {
  return problem.siteWeights.map((weight, i) =>
    finish.z.map((value, j) => value - finish.siteGradients[i][j] / (scale * weight * diagonal[j])),
  );
}

/** The last round is a certificate round at z, so that even an unsolved run says where it stands. */
function* roundLimit(
  problem: ConsensusProblem,
  state: State,
  z: Float64Array,
): Generator<MethodAsk, MethodEnd, SiteAnswers> {
  const answers = yield* askCertificate(state, z);
  const solved = estimate(problem, state, z, answers);
  return solved ?? ending(problem, state, 'round-limit', z, answers.points[0].value, state.certificate, null);
}

function ending(
  problem: ConsensusProblem,
  state: State,
  outcome: MethodEnd['outcome'],
  z: Float64Array,
  loss: number,
  certificate: Certificate | null,
  curvature: Float64Array | null,
): MethodEnd {
  return {
    outcome,
    reason: null,
    columnsAtFault: [],
    z,
    loss,
    penalty: penaltyValue(problem.penalty, z),
    certificate,
    curvature,
    rounds: state.rounds,
    rung: 'proximal',
  };
}

function progressOf(state: State, purpose: string, gap: number | null): Progress {
  const { residuals, objective } = state;
  const worst = residuals === null ? null : Math.max(residuals.primal, residuals.dual);
  return {
    rung: 'proximal',
    purpose,
    primalResidual: residuals?.primal ?? null,
    dualResidual: residuals?.dual ?? null,
    // near an optimum the gap is quadratic in the residual; a guess for the round log only
    relativeGap: gap ?? (worst === null ? null : worst * worst),
    gapMeasured: gap !== null,
    objective,
  };
}
