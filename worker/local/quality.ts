import { unpackSymmetric } from '../../numerics/packed.js';
import { dot } from '../../numerics/vector.js';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { QualityAnswer, QualityWork } from '../../protocol/messages/quality.js';
import { eachRow } from '../design/rows.js';
import { type AtPoint, atPoint, pearsonResidual } from './at-point.js';
import { notFinite } from './failures.js';
import type { PartSolvers } from './part-solvers.js';
import { rowCurvatures } from './row-pass.js';

/**
 * A cell with fewer rows than this is not shown: the threshold rule of statistical offices at its common value (Hundepool
 * et al. 2012, Statistical Disclosure Control). Of a binary response it holds for those with and those without the
 * event, too.
 */
export const CELL_ROWS_LEAST = 5;

/** How a point fits the rows: binned counts, residuals, leverages and zeros. Fails with `number-not-finite`. */
export function quality(parts: PartSolvers, work: QualityWork): Checked<QualityAnswer> {
  const at = atPoint(parts, work.point);
  if (!at.ok) return at;
  const { shard, loss, rows } = at.value;
  const { y, weights, rowCount } = shard;
  let pearsonSum = 0;
  let pearsonSquares = 0;
  for (let r = 0; r < rowCount; r++) {
    const weight = weights === null ? 1 : weights[r];
    const residual = pearsonResidual(loss, y[r], rows.eta[r]);
    pearsonSum += Math.sqrt(weight) * residual;
    pearsonSquares += weight * residual * residual;
  }
  const bins = binned(at.value, work.edges);
  const leverage = work.inverse === null ? null : leverages(at.value, work.inverse, work.leverageHigh);
  const zeros = loss.name === 'poisson' ? zerosOf(at.value) : null;
  const numbers = [pearsonSum, pearsonSquares, leverage?.sum ?? 0, ...bins.binPredicted];
  if (!numbers.every(Number.isFinite)) return notFinite('A sum of residuals, leverages or means');
  return succeed({
    work: 'quality',
    problem: work.problem,
    rows: rowCount,
    ...bins,
    pearsonSum,
    pearsonSquares,
    leverage,
    zeros,
  });
}

type Bins = Pick<QualityAnswer, 'binRows' | 'binPredicted' | 'binObserved' | 'rowsSuppressed'>;

function binned({ shard: { y, rowCount }, loss, rows: { eta } }: AtPoint, edges: Float64Array): Bins {
  const binRows = new Float64Array(edges.length + 1);
  const binPredicted = new Float64Array(edges.length + 1);
  const binObserved = new Float64Array(edges.length + 1);
  for (let r = 0; r < rowCount; r++) {
    const bin = binOf(edges, eta[r]);
    binRows[bin]++;
    binPredicted[bin] += loss.mean(eta[r]);
    binObserved[bin] += y[r];
  }
  const suppressed = suppressedBins(binRows, loss.name === 'logistic' ? binObserved : null);
  let rowsSuppressed = 0;
  for (const bin of suppressed) {
    rowsSuppressed += binRows[bin];
    binRows[bin] = 0;
    binPredicted[bin] = 0;
    binObserved[bin] = 0;
  }
  return { binRows, binPredicted, binObserved, rowsSuppressed };
}

/** How many of the ascending edges are at most `eta`. */
function binOf(edges: Float64Array, eta: number): number {
  let low = 0;
  let high = edges.length;
  while (low < high) {
    const middle = (low + high) >> 1;
    if (edges[middle] <= eta) low = middle + 1;
    else high = middle;
  }
  return low;
}

const isSmall = (count: number): boolean => count > 0 && count < CELL_ROWS_LEAST;

/**
 * Bins that are not shown: small ones and, while those together are small and so could be had by taking the others from
 * the totals, the smallest of the others that ends that. `events`: how many rows of each bin had the event; null where none can.
 */
function suppressedBins(rows: Float64Array, events: Float64Array | null): number[] {
  const small = (count: number, happened: number): boolean =>
    isSmall(count) || (events !== null && (isSmall(happened) || isSmall(count - happened)));
  const eventsOf = (bin: number): number => events?.[bin] ?? 0;
  const all = [...rows.keys()].filter((bin) => rows[bin] > 0);
  const hidden = all.filter((bin) => small(rows[bin], eventsOf(bin)));
  const shown = all.filter((bin) => !hidden.includes(bin)).sort((a, b) => rows[a] - rows[b] || a - b);
  const tells = (bins: readonly number[]): boolean =>
    small(
      bins.reduce((sum, bin) => sum + rows[bin], 0),
      bins.reduce((sum, bin) => sum + eventsOf(bin), 0),
    );
  while (shown.length > 0 && tells(hidden)) {
    const enough = shown.findIndex((bin) => !tells([...hidden, bin]));
    hidden.push(...shown.splice(Math.max(0, enough), 1));
  }
  return hidden;
}

/**
 * h = w · loss″ · xᵀ H⁻¹ x / N (Pregibon 1981), H the pooled curvature; over all sites they add up to the number of
 * coefficients. With an intercept of its own, x about its curvature-weighted means, and the intercept's share.
 */
function leverages(
  { shard, loss, rows, means }: AtPoint,
  inverse: Float64Array,
  high: number,
): NonNullable<QualityAnswer['leverage']> {
  const { p } = shard;
  const full = unpackSymmetric(inverse);
  const width = p - (means === null ? 0 : 1);
  const curvatures = rowCurvatures(shard, loss, rows.eta);
  const total = curvatures.reduce((sum, curvature) => sum + curvature, 0);
  const own = means === null || total === 0 ? 0 : 1 / total;
  const away = new Float64Array(width);
  let sum = 0;
  let most = 0;
  let rowsHigh = 0;
  eachRow(shard.rows, (x, start, r) => {
    const from = start + (p - width);
    for (let j = 0; j < width; j++) away[j] = x[from + j] - (means === null ? 0 : means[j + 1]);
    let square = own;
    for (let i = 0; i < width; i++) square += away[i] * dot(full.subarray(i * width, (i + 1) * width), away);
    const leverage = curvatures[r] * square;
    sum += leverage;
    most = Math.max(most, leverage);
    if (leverage > high) rowsHigh++;
  });
  return { sum, most, rowsHigh };
}

function zerosOf({ shard: { y }, loss, rows: { eta } }: AtPoint): NonNullable<QualityAnswer['zeros']> {
  let observed = 0;
  let expected = 0;
  for (let r = 0; r < y.length; r++) {
    if (y[r] === 0) observed++;
    expected += Math.exp(-loss.mean(eta[r]));
  }
  return { observed, expected };
}
