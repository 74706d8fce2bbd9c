import { penaltyValue } from '../../numerics/penalty.js';
import { plusScaled } from '../../numerics/vector.js';
import { pointOf, withAllSites } from './late-all-sites.js';
import type { Arrival, LateDesk, Posting } from './late-desk.js';
import type { LateAnswers, LateAsk } from './late-method.js';
import type { MethodAsk, MethodEnd, SiteAnswers } from './method.js';
import { flooredDiagonal } from './metric.js';
import { diagonalCurvatures, evaluate, required, siteGradients } from './pooled.js';
import type { ConsensusProblem } from './problem.js';
import { certify, lastCertificate, progressOf, type Standing, standingFrom } from './proximal-certificate.js';
import { normalisedResiduals } from './residuals.js';
import { SiteMetric } from './site-metric.js';
import { SiteModels } from './site-models.js';

/** Most numbers in the coordinator's models of all sites, K p². */
const MODEL_NUMBERS_MOST = 2e7;

/** The consensus vector and the centre that a site was sent; null with questions that are not about one. */
export type Sent = { readonly z: Float64Array; readonly center: Float64Array } | null;

/**
 * Consensus ADMM with a partial barrier and bounded staleness (Zhang and Kwok 2014; Chang, Hong, Liao, Wang 2016),
 * metric M_i = w_i · D,
 *
 *     z   = argmin g(z) + ½ zᵀ(Σ M_i)z − (Σ M_i s_i)ᵀz          with the newest s_i of every site
 *     s_i ← s_i + x_i − z_i                                     of the sites heard, z_i what the site was sent
 *
 * Not relaxed, not accelerated, the metric fixed: under staleness the first diverged and the others were destructive.
 * Certificates are taken with all sites at one z.
 */
export function* partialBarrier(
  problem: ConsensusProblem,
  desk: LateDesk<Sent>,
): Generator<LateAsk, { readonly end: MethodEnd; readonly matricesLeft: number }, LateAnswers> {
  const { standing, gradients } = yield* withAllSites(desk, null, setUp(problem));
  const metric = new SiteMetric(problem.siteWeights, standing.startDiagonal);
  let s = metric.withDuals(problem.start, gradients);
  let x = problem.siteWeights.map(() => problem.start);
  let zOld: Float64Array | null = null;
  for (;;) {
    const z = metric.consensus(problem.penalty, s);
    standing.rounds = desk.rounds;
    if (zOld !== null && hasSettled(standing, metric, x, z, zOld, s)) {
      const { end, restart } = yield* withAllSites(desk, null, certify(problem, standing, z));
      if (end !== null) return { end, matricesLeft: standing.matricesLeft };
      if (restart !== null && standing.best?.z === restart.z) {
        s = metric.withDuals(restart.z, standing.best.gradients);
        x = x.map(() => restart.z);
        zOld = null;
        continue;
      }
    }
    if (desk.rounds >= problem.roundsMost - 1) {
      const end = yield* withAllSites(desk, null, lastCertificate(problem, standing, z));
      return { end, matricesLeft: standing.matricesLeft };
    }
    const sites = desk.sites();
    const late = desk.slow();
    const postings = sites
      .filter((i) => desk.owed(i) === null)
      .map((i) => proximalPosting(metric, i, z, s[i], x[i]));
    const arrivals = yield* desk.ask(
      postings,
      { waitFor: sites.filter((i) => desk.isOld(i)), late },
      progressOf(standing, 'proximal points', null),
    );
    for (const arrival of arrivals) {
      const { site, point, sent } = proximalReply(arrival);
      s[site] = plusScaled(plusScaled(s[site], 1, point), -1, sent.z);
      x[site] = point;
      const scale = metric.scales[site];
      const slope = point.map((value, j) => scale * metric.diagonal[j] * (sent.center[j] - value));
      standing.models?.learnOf(site, point, slope);
    }
    zOld = z;
  }
}

function hasSettled(
  standing: Standing,
  metric: SiteMetric,
  x: readonly Float64Array[],
  z: Float64Array,
  zOld: Float64Array,
  s: readonly Float64Array[],
): boolean {
  standing.residuals = normalisedResiduals(x, z, zOld, s, metric);
  return Math.max(standing.residuals.primal, standing.residuals.dual) <= standing.trigger;
}

function proximalPosting(
  { scales, diagonal }: SiteMetric,
  site: number,
  z: Float64Array,
  s: Float64Array,
  start: Float64Array,
): Posting<Sent> {
  const center = plusScaled(plusScaled(z, 1, z), -1, s);
  return {
    site,
    post: { kind: 'proximal', center, scale: scales[site], diagonal, start },
    note: { z, center },
  };
}

function proximalReply({ site, note, reply }: Arrival<Sent>) {
  if (note === null) throw new TypeError('a certificate is waited for, so that none can come later');
  return { site, point: pointOf(reply), sent: note };
}

/** Gradients and diagonal curvature of all sites at z₀: the metric, and duals to begin with. */
function* setUp(
  problem: ConsensusProblem,
): Generator<MethodAsk, { standing: Standing; gradients: readonly Float64Array[] }, SiteAnswers> {
  const { p, penalty: g, siteWeights, start } = problem;
  const progress = progressOf(null, 'gradients at the start', null);
  const at = yield* evaluate([{ point: start, want: 'diagonal' }], null, progress);
  const [pooled] = at.points;
  const objective = pooled.value + penaltyValue(g, start);
  const startDiagonal = flooredDiagonal(required(pooled.diagonal, 'diagonal'));
  const gradients = siteGradients(at);
  const small = siteWeights.length * p * p <= MODEL_NUMBERS_MOST;
  const points = siteWeights.map(() => start);
  const learned = small
    ? new SiteModels(g, points, [...gradients], diagonalCurvatures(at), startDiagonal)
    : null;
  return { standing: standingFrom(problem, startDiagonal, objective, learned), gradients };
}
