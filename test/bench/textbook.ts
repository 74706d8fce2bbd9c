import { type Penalty, penaltyValue } from '../../coordinator/consensus/penalty.js';
import { zStepDiagonal } from '../../coordinator/consensus/z-step.js';
import type { LocalSolver } from '../../worker/local/local-solver.js';
import { must } from '../support/method-driver.js';

const RELAXATION = 1.6;
const ROUNDS_MOST = 500;

/**
 * Consensus ADMM as it stands in the textbook (Boyd, Parikh, Chu, Peleato, Eckstein 2011, §7.1): one fixed ρ = 1/K at
 * every site, over-relaxation 1.6, nothing else. Stopped by the true gap, which no user has. Returns the rounds after
 * which F(z) was within each tolerance of the optimum, null where 500 were not enough.
 */
export function textbookRounds(
  sites: readonly LocalSolver[],
  penalty: Penalty,
  start: Float64Array,
  optimum: number,
  tolerances: readonly number[],
): (number | null)[] {
  const p = start.length;
  const rho = 1 / sites.length;
  const ones = new Float64Array(p).fill(1);
  const metric = new Float64Array(p).fill(1);
  let s = sites.map(() => start);
  let x = sites.map(() => start);
  const reached: (number | null)[] = tolerances.map(() => null);
  for (let round = 1; round <= ROUNDS_MOST; round++) {
    const b = new Float64Array(p);
    for (const own of s) for (let j = 0; j < p; j++) b[j] += rho * own[j];
    const z = zStepDiagonal(penalty, metric, b);
    const loss = sites.reduce((sum, site) => sum + must(site.evaluate(z, 'value')).value, 0);
    const gap = (loss + penaltyValue(penalty, z) - optimum) / Math.max(Math.abs(optimum), 1e-12);
    tolerances.forEach((tolerance, k) => {
      if (reached[k] === null && gap <= tolerance) reached[k] = round;
    });
    if (reached.every((rounds) => rounds !== null)) break;
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
  return reached;
}
