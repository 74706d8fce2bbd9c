import { penaltyValue } from '../../numerics/penalty.js';
import { Acceleration } from './acceleration.js';
import { Anderson } from './anderson.js';
import { curvatureRung } from './curvature-rung.js';
import { flawFromTheStart } from './existence.js';
import type { Method, MethodAsk, MethodEnd, SiteAnswers } from './method.js';
import { flooredDiagonal } from './metric.js';
import { askProximal, ledByModels } from './model-led.js';
import { diagonalCurvatures, evaluate, required, siteCurvatures, siteGradients } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import {
  certify,
  ending,
  estimateTrigger,
  lastCertificate,
  look,
  progressOf,
  type Standing,
  standingFrom,
  TRIGGERS,
} from './proximal-certificate.js';
import { balancingFactor, normalisedResiduals } from './residuals.js';
import { SiteMetric } from './site-metric.js';
import { SiteModels } from './site-models.js';

/** Most numbers in the coordinator's models of all sites, K p²: above it, Anderson acceleration. */
const MODEL_NUMBERS_MOST = 2e7;
/** Rounds without a certificate at which one is asked all the same: residuals of an iteration that creeps tell little. */
const LOOKS = [64, 128, 256];
/** One matrix for the models and one for the certificate at least. */
const MODEL_MATRICES_LEAST = 2;

/**
 * The `proximal` rung: consensus ADMM (Boyd, Parikh, Chu, Peleato, Eckstein 2011, §7) in its Douglas-Rachford form,
 * with the metric M_i = c · w_i · D, D the pooled diagonal curvature at z₀:
 *
 *     z   = argmin g(z) + ½ zᵀ(Σ M_i)z − (Σ M_i s_i)ᵀz          consensus step
 *     u_i = s_i − z                                             scaled duals
 *     x_i = argmin φ_i(x) + ½ (x − v_i)ᵀM_i(x − v_i)            at the sites, v_i = z − u_i
 *     s_i ← s_i + α (x_i − z)                                   relaxed, accelerated
 *
 * Where curvature matrices may leave, the first is spent at z₀ on models of the sites, which lead the iteration, the
 * others on a second-order finish. Where none may, or where the models lead nowhere, residual balancing sets c, Anderson
 * acceleration extrapolates s, and the certificate may be an estimate.
 */
export function* proximalRung(problem: ConsensusProblem): Method {
  // the model of a squared loss is the function: one matrix, anywhere, solves it
  if (problem.quadratic && problem.curvatureMost > 0)
    return { ...(yield* curvatureRung(problem)), rung: 'proximal' as const };
  const { standing, models, end } = yield* setUp(problem);
  if (end !== null) return end;
  const metric = new SiteMetric(problem.siteWeights, standing.startDiagonal);
  const led = models === null ? null : yield* ledByModels(problem, standing, metric, models);
  return led ?? (yield* balancedIteration(problem, standing, metric));
}

/** The iteration with residual balancing and Anderson acceleration, from the best point measured so far. */
function* balancedIteration(
  problem: ConsensusProblem,
  standing: Standing,
  firstMetric: SiteMetric,
): Generator<MethodAsk, MethodEnd, SiteAnswers> {
  const g = problem.penalty;
  const acceleration = new Acceleration(new Anderson());
  standing.gapGuess = null;
  standing.trigger = standing.matricesLeft > 0 ? TRIGGERS.finish : estimateTrigger(problem);
  let metric = firstMetric;
  let { s, x } = pointsFrom(problem, standing, metric);
  let zOld: Float64Array | null = null;
  for (let k = 0; ; k++) {
    const z = metric.consensus(g, s);
    if (zOld !== null) {
      const residuals = normalisedResiduals(x, z, zOld, s, metric);
      standing.residuals = residuals;
      if (Math.max(residuals.primal, residuals.dual) <= standing.trigger) {
        const { end, restart } = yield* certify(problem, standing, z);
        if (end !== null) return end;
        if (restart !== null && standing.best?.z === restart.z) {
          ({ s, x } = pointsFrom(problem, standing, metric));
          acceleration.clear();
          zOld = null;
          continue;
        }
      } else if (LOOKS.includes(k)) {
        const end = yield* look(problem, standing, z);
        if (end !== null) return end;
      }
      const factor = balancingFactor(residuals, k);
      if (factor !== 1) {
        metric = metric.times(factor);
        s = s.map((own) => dualsDivided(own, z, factor));
        acceleration.clear();
      }
    }
    if (standing.rounds >= problem.roundsMost - 1) return yield* lastCertificate(problem, standing, z);
    const centers = metric.centers(s, z);
    x = yield* askProximal(standing, metric, centers, x);
    standing.models?.learn(x, metric.gradients(centers, x));
    s = acceleration.next({ metric, s, z, centers, x });
    zOld = z;
  }
}

/** The s with the duals u = s − z divided by a factor: M u stays where the metric is multiplied by it. */
function dualsDivided(s: Float64Array, z: Float64Array, factor: number): Float64Array {
  const out = new Float64Array(z.length);
  for (let j = 0; j < out.length; j++) out[j] = z[j] + (s[j] - z[j]) / factor;
  return out;
}

/** s and the sites' starting points at the best point measured; at z₀, without duals, where that is the start. */
function pointsFrom(
  { siteWeights, start }: ConsensusProblem,
  { best }: Standing,
  metric: SiteMetric,
): { s: readonly Float64Array[]; x: readonly Float64Array[] } {
  const x = siteWeights.map(() => best?.z ?? start);
  return { s: best === null ? x : metric.withDuals(best.z, best.gradients), x };
}

/** Gradient and diagonal curvature at z₀; where matrices may leave, the curvature itself, and models that begin with it. */
function* setUp(
  problem: ConsensusProblem,
): Generator<
  MethodAsk,
  { standing: Standing; models: SiteModels | null; end: MethodEnd | null },
  SiteAnswers
> {
  const { p, penalty: g, siteWeights, start } = problem;
  const small = siteWeights.length * p * p <= MODEL_NUMBERS_MOST;
  const modelled = small && problem.curvatureMost >= MODEL_MATRICES_LEAST;
  const purpose = modelled ? 'curvature at the start' : 'gradients at the start';
  const want = modelled ? 'curvature' : 'diagonal';
  const at = yield* evaluate([{ point: start, want }], null, progressOf(null, purpose, null));
  const [pooled] = at.points;
  const objective = pooled.value + penaltyValue(g, start);
  const startDiagonal = flooredDiagonal(required(pooled.diagonal, 'diagonal'));
  const standing: Standing = {
    ...standingFrom(problem, startDiagonal, objective, null),
    rounds: 1,
    trigger: TRIGGERS.led,
    matricesLeft: problem.curvatureMost - (modelled ? 1 : 0),
    curvatureSeen: modelled,
  };
  const points = siteWeights.map(() => start);
  if (!modelled) {
    // without a matrix the models begin with what a certificate round brings anyway
    if (small)
      standing.models = new SiteModels(g, points, siteGradients(at), diagonalCurvatures(at), startDiagonal);
    return { standing, models: null, end: null };
  }
  const aliased = flawFromTheStart(problem, required(pooled.curvature, 'curvature'));
  if (aliased !== null) {
    const refused = ending(problem, standing, 'refused', start, pooled.value, null);
    const end = { ...refused, reason: aliased.reason, columnsAtFault: aliased.columns };
    return { standing, models: null, end };
  }
  const models = new SiteModels(g, points, siteGradients(at), siteCurvatures(at), startDiagonal);
  standing.models = models;
  return { standing, models, end: null };
}
