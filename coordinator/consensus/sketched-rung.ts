import { runawayColumns } from '../../numerics/determined.js';
import { seededRandom } from '../../numerics/random.js';
import { gapOf, type ModelStep, modelStep, relativeTo, sketchedCertificate } from './certificate.js';
import { Damping, FAILURES_MOST } from './damping.js';
import { endAt, progressAt } from './endings.js';
import type { Certificate, Method, MethodAsk, MethodEnd, Progress, SiteAnswers } from './method.js';
import { plusDiagonal } from './metric.js';
import { evaluate, type PooledEvaluation, required } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import { productsOf, SketchDirections, sketchAsk } from './sketch-directions.js';
import { SketchedCurvature } from './sketched-curvature.js';
import {
  bestLinePoint,
  bestTrial,
  isNoRise,
  linePoints,
  type Standing,
  standingAt,
  trialPoints,
} from './trial-points.js';

/** Relative decrement in the step's model above which no certificate can hold: its model is not worth factoring. */
const CERTIFIABLE_MOST = 1e-5;

/** Differences of F below this share of the gap to certify do not decide between trial points. */
const INDIFFERENCE = 0.1;

/** What the method has learned and where it stands. */
interface State {
  readonly problem: ConsensusProblem;
  readonly directions: SketchDirections;
  readonly curvature: SketchedCurvature;
  readonly startDiagonal: Float64Array;
  here: Standing;
  /** Whether curvature was sketched at z itself. */
  fresh: boolean;
  rounds: number;
}

/**
 * The `sketched` rung: proximal Newton steps (Lee, Sun, Saunders 2014) in a model of the pooled curvature that is
 * learned from its diagonal, its products with m directions a round, and the differences of the gradients at the trial
 * points (symmetric updates of rank m and one: Conn, Gould, Toint 1991). (m + 4) p numbers leave a site in a round.
 */
export function* sketchedRung(problem: ConsensusProblem): Method {
  const g = problem.penalty;
  const state = yield* started(problem);
  const { curvature } = state;
  const damping = new Damping();
  for (;;) {
    const { here } = state;
    const metric = curvature.stepMetric();
    const step = modelStep(g, metric, here.gradient, here.z);
    if (step === null) return ending(state, null, 'stalled', 'the sketched curvature could not be factored');
    const certificate = certify(state, step);
    if (certificate !== null && certificate.relativeGap <= problem.tolerance)
      return certified(state, certificate, step);
    if (state.rounds >= problem.roundsMost) return ending(state, certificate, 'round-limit', null);
    if (damping.failures >= FAILURES_MOST)
      return ending(state, certificate, 'stalled', `no progress in ${FAILURES_MOST} rounds`);

    const damped =
      damping.amount > 0
        ? modelStep(g, plusDiagonal(metric, damping.amount, curvature.diagonal), here.gradient, here.z)
        : null;
    const { tried, line, lineLosses } = yield* tryPoints(state, (damped ?? step).direction, metric, step);
    const best = chosenTrial(problem, here, tried);
    const onLine = best === null ? bestLinePoint(g, here, line, lineLosses) : null;
    if (best !== null) {
      state.here = tried[best];
      state.fresh = best === 0;
      damping.succeeded();
    } else if (onLine !== null) {
      yield* moveTo(state, line[onLine], step);
      damping.foundShorter();
    } else damping.failed();
  }
}

/** The first ask: f, ∇f, diag H and a first sketch at z₀. */
function* started(problem: ConsensusProblem): Generator<MethodAsk, State, SiteAnswers> {
  const directions = new SketchDirections(seededRandom(problem.seed), problem.sketch);
  const sketch = directions.next([], new Float64Array(problem.p).fill(1));
  const answers = yield* evaluate(
    [{ point: problem.start, want: 'diagonal' }],
    null,
    progressOf(null, null, 'sketch of the curvature at the start'),
    sketchAsk(sketch),
  );
  const curvature = new SketchedCurvature(required(answers.points[0].diagonal, 'diagonal'));
  const startDiagonal = curvature.diagonal;
  curvature.learnSketch(sketch, productsOf(answers, sketch.length));
  directions.keep(sketch, curvature.diagonal);
  const here = standingOf(problem, problem.start, answers, 0);
  return { problem, directions, curvature, startDiagonal, here, fresh: true, rounds: 1 };
}

/** One round of trial points along the step, with curvature sketched at the first, and all there is to learn from it. */
function* tryPoints(
  state: State,
  direction: Float64Array,
  metric: Float64Array,
  step: ModelStep,
): Generator<
  MethodAsk,
  {
    readonly tried: readonly Standing[];
    readonly line: readonly Float64Array[];
    readonly lineLosses: readonly number[];
  },
  SiteAnswers
> {
  const { problem, directions, curvature, here } = state;
  const trials = trialPoints(problem.penalty, here.z, direction);
  const line = linePoints(problem.penalty, here.z, direction);
  const sketch = directions.next(curvature.errors, curvature.diagonal);
  const answers = yield* evaluate(
    [
      ...trials.map((point, k) => ({ point, want: k === 0 ? ('diagonal' as const) : ('gradient' as const) })),
      ...line.map((point) => ({ point, want: 'value' as const })),
    ],
    null,
    progressOf(here, step, 'trial points with a sketch of the curvature'),
    sketchAsk(sketch),
  );
  state.rounds++;
  const tried = trials.map((point, k) => standingOf(problem, point, answers, k));
  // the nearest to the model's own step is learned last: later updates are exact
  for (const there of [...tried].reverse())
    curvature.learnSecant(here, there, metric, isNoRise(here, there.objective));
  if (isNoRise(here, tried[0].objective)) {
    if (!problem.quadratic) curvature.follow(required(answers.points[0].diagonal, 'diagonal'));
    curvature.learnSketch(sketch, productsOf(answers, sketch.length));
    directions.keep(sketch, curvature.diagonal);
  }
  return { tried, line, lineLosses: answers.points.slice(trials.length).map(({ value }) => value) };
}

/**
 * The trial with the least F, if that is no rise; the first, where curvature was sketched, if F is as good as there:
 * there alone it can be certified.
 */
function chosenTrial(problem: ConsensusProblem, here: Standing, tried: readonly Standing[]): number | null {
  const points = tried.map(({ z }) => z);
  const losses = tried.map(({ loss }) => loss);
  const best = bestTrial(problem.penalty, here, points, losses);
  if (best === null || !isNoRise(here, tried[0].objective)) return best;
  const more = tried[0].objective - tried[best].objective;
  return more <= INDIFFERENCE * problem.tolerance * relativeTo(here.objective) ? 0 : best;
}

/** All trial points were too far: one round at the best of the shorter steps. */
function* moveTo(
  state: State,
  point: Float64Array,
  step: ModelStep,
): Generator<MethodAsk, void, SiteAnswers> {
  const { problem, curvature, here } = state;
  const answers = yield* evaluate(
    [{ point, want: 'gradient' }],
    null,
    progressOf(here, step, 'a shorter step'),
  );
  state.rounds++;
  state.here = standingOf(problem, point, answers, 0);
  curvature.learnSecant(here, state.here, null, false);
  state.fresh = false;
}

/** Null where curvature was not measured at z, or the step's own model already says that z is too far off. */
function certify({ problem, here, curvature, fresh }: State, step: ModelStep): Certificate | null {
  if (!fresh || step.decrement > CERTIFIABLE_MOST * relativeTo(here.objective)) return null;
  const cautious = modelStep(problem.penalty, curvature.certificateMetric(), here.gradient, here.z);
  return cautious === null ? null : sketchedCertificate(problem, here, cautious.decrement);
}

function certified(state: State, certificate: Certificate, step: ModelStep): MethodEnd {
  const { problem, startDiagonal } = state;
  const runaway = problem.curvatureMayVanish ? [] : runawayColumns(step.direction, step.bend, startDiagonal);
  return runaway.length > 0
    ? ending(state, certificate, 'unbounded', 'separable', runaway)
    : ending(state, certificate, 'solved', null);
}

const standingOf = (
  problem: ConsensusProblem,
  z: Float64Array,
  answers: PooledEvaluation,
  k: number,
): Standing => {
  const { value, gradient } = answers.points[k];
  return standingAt(problem, z, value, required(gradient, 'gradient'));
};

const ending = (
  { problem, here, rounds }: State,
  certificate: Certificate | null,
  outcome: MethodEnd['outcome'],
  reason: string | null,
  columnsAtFault: readonly number[] = [],
): MethodEnd =>
  endAt(problem, here, {
    outcome,
    reason,
    columnsAtFault,
    certificate,
    curvature: null,
    rounds,
    rung: 'sketched',
  });

const progressOf = (here: Standing | null, step: ModelStep | null, purpose: string): Progress =>
  progressAt('sketched', here, gapOf(here, step), false, purpose);
