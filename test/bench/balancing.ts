import { flooredDiagonal } from '../../coordinator/consensus/metric.js';
import { balancingFactor, normalisedResiduals } from '../../coordinator/consensus/residuals.js';
import { SiteMetric } from '../../coordinator/consensus/site-metric.js';
import { sumOf } from '../../numerics/vector.js';
import { must } from '../support/method-driver.js';
import { type BaselineProblem, type BaselineRun, GapWatch } from './baseline.js';

const RELAXATION = 1.6;

/**
 * Consensus ADMM with the metric c · w_i · D, D the pooled diagonal curvature at the start, and c by normalised residual
 * balancing (Wohlberg 2017): the proximal rung without models, acceleration or a finish.
 */
export function balancing(problem: BaselineProblem): BaselineRun {
  const { sites, siteWeights, penalty, start } = problem;
  const p = start.length;
  const watch = new GapWatch(problem);
  const diagonals = sites.map((site) => must(site.evaluate(start, 'diagonal')).diagonal ?? start);
  watch.count(2 * p + 1, p);
  let metric = new SiteMetric(siteWeights, flooredDiagonal(sumOf(diagonals)));
  let s: readonly Float64Array[] = sites.map(() => start);
  let x: readonly Float64Array[] = s;
  let zOld: Float64Array | null = null;
  for (let k = 0; ; k++) {
    const z = metric.consensus(penalty, s);
    watch.look(z);
    if (watch.done) return watch.run;
    if (zOld !== null) {
      const factor = balancingFactor(normalisedResiduals(x, z, zOld, s, metric), k);
      const around = z;
      metric = metric.times(factor);
      s = s.map((own) => own.map((value, j) => around[j] + (value - around[j]) / factor));
    }
    watch.count(p, p);
    const centers = metric.centers(s, z);
    x = sites.map(
      (site, i) => must(site.proximal(centers[i], metric.scales[i], metric.diagonal, x[i])).point,
    );
    s = s.map((own, i) => own.map((value, j) => value + RELAXATION * (x[i][j] - z[j])));
    zOld = z;
  }
}
