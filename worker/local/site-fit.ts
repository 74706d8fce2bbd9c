import { dependentColumns, runawayColumns } from '../../numerics/determined.js';
import { dot } from '../../numerics/vector.js';
import { type Checked, type Failure, succeed } from '../../protocol/failure.js';
import type { SiteFitAnswer, SiteFitWork } from '../../protocol/messages/site-fit.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { pearsonSum } from './at-point.js';
import { atBestIntercept, isInformative } from './intercept.js';
import { type NewtonEnd, type NewtonLimits, newtonProximal } from './newton.js';
import type { PartSolvers } from './part-solvers.js';
import { rowCurvatures, rowPass, rowState } from './row-pass.js';

const LIMITS: NewtonLimits = { stepsMost: 100, accuracy: 1e-14 };

/**
 * The site's own fit: argmin φ over the solver columns that its rows determine, by Newton's method. Columns without spread
 * here, and combinations of earlier ones, stay at zero. No fit where the rows are too few, or the loss has no minimiser
 * (separated classes, a level without events: Albert and Anderson 1984).
 */
export function siteFit(parts: PartSolvers, { problem, start }: SiteFitWork): Checked<SiteFitAnswer> {
  const { whole, loss, ownIntercept } = parts;
  const none = (reason: string): Checked<SiteFitAnswer> =>
    succeed({ work: 'site-fit', problem, fit: null, reason });
  if (ownIntercept && !isInformative(whole, loss))
    return none('Every response at this site is the same: its own fit has no finite intercept.');
  const lead = ownIntercept ? 1 : 0;
  const dependent = dependentOf(whole);
  const kept = [...Array(whole.p).keys()].filter((j) => !dependent.includes(j));
  const rows = rowsCounted(whole);
  if (kept.length === lead) return none('No column has spread at this site.');
  if (rows < kept.length + 1)
    return none(`This site has ${rows} rows; its own fit of ${kept.length} coefficients needs more.`);
  const from = ownIntercept ? atBestIntercept(whole, loss, start) : start;
  const shard = columnsOf(whole, kept);
  const found = minimum(
    shard,
    loss,
    Float64Array.from(kept, (j) => from[j]),
  );
  if (typeof found === 'string') return none(found);
  const point = new Float64Array(whole.p);
  kept.forEach((j, k) => {
    point[j] = found[k];
  });
  const state = rowState(whole.rowCount);
  rowPass(whole, loss, point, state, null);
  const pearson = pearsonSum(whole, loss, state.eta);
  const own = point.slice(lead);
  const at = parts.solver(null).evaluate(own, 'curvature');
  if (!at.ok) return at;
  const { value, curvature } = at.value;
  if (curvature === null) throw new Error('wanted, but not evaluated');
  if (!Number.isFinite(pearson)) return none('The residuals of its own fit are not finite.');
  const undetermined = dependent.map((j) => j - lead);
  return succeed({
    work: 'site-fit',
    problem,
    fit: { point: own, value, curvature, undetermined, pearson },
    reason: null,
  });
}

/** Columns that the rows with weight do not tell from earlier ones; the intercept comes first. */
function dependentOf(shard: Shard): number[] {
  const { rows, p, weights } = shard;
  const gram = rows.gram(weights, 1);
  return dependentColumns(gram, p, [...Array(p).keys()]);
}

const rowsCounted = ({ rowCount, weights }: Shard): number =>
  weights === null ? rowCount : weights.filter((weight) => weight > 0).length;

const columnsOf = (shard: Shard, kept: readonly number[]): Shard =>
  kept.length === shard.p ? shard : { ...shard, p: kept.length, rows: shard.rows.columns(kept) };

/** The minimiser, or why there is none. */
function minimum(shard: Shard, loss: Loss, start: Float64Array): Float64Array | string {
  const metric = new Float64Array(shard.p);
  const end = newtonProximal({ shard, loss, center: metric, metric, start }, LIMITS);
  if (!end.ok) return words(end.failure);
  if ((loss.name === 'logistic' || loss.name === 'poisson') && runsOff(shard, loss, start, end.value))
    return loss.name === 'logistic'
      ? 'Its columns separate the classes at this site: its own fit has no finite coefficients.'
      : 'A combination of its columns has no events at this site: its own fit has no finite coefficients.';
  return end.value.converged
    ? end.value.point
    : `Its own fit has not converged in ${end.value.newtonSteps} steps.`;
}

const words = ({ message }: Failure): string => `Its own fit cannot be found: ${message}`;

/** The last step still moves coefficients along which curvature has all but gone. */
function runsOff(shard: Shard, loss: Loss, start: Float64Array, { point, lastStep }: NewtonEnd): boolean {
  const { p, rowCount } = shard;
  const rows = rowState(rowCount);
  const before = new Float64Array(p);
  rowPass(shard, loss, start, rows, null);
  shard.rows.addWeightedSquares(0, rowCount, rowCurvatures(shard, loss, rows.eta), before);
  rowPass(shard, loss, point, rows, null);
  const gram = shard.rows.gram(rowCurvatures(shard, loss, rows.eta), 1);
  const product = new Float64Array(p);
  for (let i = 0; i < p; i++) product[i] = dot(gram.subarray(i * p, (i + 1) * p), lastStep);
  return runawayColumns(lastStep, dot(lastStep, product), before).length > 0;
}
