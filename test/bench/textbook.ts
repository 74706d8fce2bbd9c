import { zStepDiagonal } from '../../numerics/z-step.js';
import { must } from '../support/method-driver.js';
import { type BaselineProblem, type BaselineRun, GapWatch } from './baseline.js';

const RELAXATION = 1.6;

/**
 * Consensus ADMM as it stands in the textbook (Boyd, Parikh, Chu, Peleato, Eckstein 2011, §7.1): one fixed ρ = 1/K at
 * every site, over-relaxation 1.6, nothing else.
 */
export function textbook(problem: BaselineProblem): BaselineRun {
  const { sites, penalty, start } = problem;
  const p = start.length;
  const watch = new GapWatch(problem);
  const rho = 1 / sites.length;
  const ones = new Float64Array(p).fill(1);
  const metric = new Float64Array(p).fill(1);
  let s = sites.map(() => start);
  let x = sites.map(() => start);
  for (;;) {
    const b = new Float64Array(p);
    for (const own of s) for (let j = 0; j < p; j++) b[j] += rho * own[j];
    const z = zStepDiagonal(penalty, metric, b);
    watch.look(z);
    if (watch.done) return watch.run;
    watch.count(p, p);
    x = sites.map(
      (site, i) =>
        must(
          site.proximal(
            s[i].map((value, j) => 2 * z[j] - value),
            rho,
            ones,
            x[i],
          ),
        ).point,
    );
    s = s.map((own, i) => own.map((value, j) => value + RELAXATION * (x[i][j] - z[j])));
  }
}
