import { Acceleration } from './acceleration.js';
import { relativeTo } from './certificate.js';
import type { MethodAsk, MethodEnd, SiteAnswers } from './method.js';
import { siteCurvatures } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import { certify, lastCertificate, progressOf, type Standing } from './proximal-certificate.js';
import { normalisedResiduals } from './residuals.js';
import type { SiteMetric } from './site-metric.js';
import type { SiteModels } from './site-models.js';

/** c for an iteration led by models: a tighter hold keeps the sites' points, and so the secants, near z. */
const HOLD = 3;
/** Proposals thrown away, and rounds since the start or the last finish, after which the models are given up. */
const REJECTIONS_MOST = 3;
const ROUNDS_MOST = 12;

/** Relative decrease of the step before the last matrix, in tolerances: its end is some thousand times nearer. */
const LAST_STEP = 1e3;

/**
 * Consensus ADMM whose s comes from models of the sites: z is the minimiser of the summed models plus g, u_i the dual
 * that each model foretells there, and the proximal points answered correct the models. Null where they lead to no
 * certificate: the iteration without models takes over from the best point measured.
 */
export function* ledByModels(
  problem: ConsensusProblem,
  standing: Standing,
  looseMetric: SiteMetric,
  models: SiteModels,
): Generator<MethodAsk, MethodEnd | null, SiteAnswers> {
  const { penalty: g, siteWeights, start } = problem;
  const metric = looseMetric.times(HOLD);
  const acceleration = new Acceleration(models);
  let x: readonly Float64Array[] = siteWeights.map(() => start);
  let s: readonly Float64Array[] = models.step(metric, start) ?? x;
  let zOld: Float64Array | null = null;
  for (let k = 0; k < ROUNDS_MOST && acceleration.rejections < REJECTIONS_MOST; k++) {
    const z = metric.consensus(g, s);
    if (zOld !== null) {
      standing.residuals = normalisedResiduals(x, z, zOld, s, metric);
      standing.gapGuess = models.promised / relativeTo(standing.bestObjective);
      if (isTime(problem, standing)) {
        const { end, restart } = yield* certify(problem, standing, z);
        if (end !== null) return end;
        if (restart !== null) {
          const { best } = standing;
          if (best === null || best.z !== restart.z) return null;
          models.measure(best.z, best.gradients, siteCurvatures(restart.measured));
          s = models.step(metric, best.z) ?? metric.withDuals(best.z, best.gradients);
          x = siteWeights.map(() => best.z);
          acceleration.clear();
          zOld = null;
          k = -1;
          continue;
        }
      }
    }
    if (standing.rounds >= problem.roundsMost - 1) return yield* lastCertificate(problem, standing, z);
    const centers = metric.centers(s, z);
    x = yield* askProximal(standing, metric, centers, x);
    s = acceleration.next({ metric, s, z, centers, x });
    zOld = z;
  }
  return null;
}

/**
 * Whether z deserves a certificate. Under foretold duals the move of z says nothing: what counts is whether the sites
 * agree with it. The last matrix waits for a step so small that its end may be expected to certify.
 */
function isTime(
  problem: ConsensusProblem,
  { residuals, trigger, matricesLeft, gapGuess }: Standing,
): boolean {
  if (residuals === null || residuals.primal > trigger) return false;
  return matricesLeft !== 1 || (gapGuess ?? 0) <= LAST_STEP * problem.tolerance;
}

export function* askProximal(
  standing: Standing,
  metric: SiteMetric,
  centers: readonly Float64Array[],
  starts: readonly Float64Array[],
): Generator<MethodAsk, readonly Float64Array[], SiteAnswers> {
  standing.rounds++;
  const answers = yield {
    kind: 'proximal',
    centers,
    scales: metric.scales,
    diagonal: metric.diagonal,
    starts,
    progress: progressOf(standing, 'proximal points', null),
  };
  if (answers.kind !== 'proximal') throw new TypeError(`a proximal ask was answered with ${answers.kind}`);
  return answers.points;
}
