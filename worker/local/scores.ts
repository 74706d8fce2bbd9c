import { packSymmetric } from '../../numerics/packed.js';
import { allFinite } from '../../numerics/vector.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { ScoresAnswer, ScoresWork } from '../../protocol/messages/scores.js';
import { eachRow } from '../design/rows.js';
import type { Clusters } from '../design/shard.js';
import { type AtPoint, atPoint, byCoefficients, pearsonSum, productsByCoefficients } from './at-point.js';
import { notFinite } from './failures.js';
import type { PartSolvers } from './part-solvers.js';

/**
 * Sums of the rows' scores s = w · loss′ · x and of their products, row by row (White 1980) and summed within clusters
 * first (Liang and Zeger 1986). With an intercept of its own the rows' columns are taken about their curvature-weighted
 * means, which gives the block of the coefficients in the sandwich of all parameters.
 */
export function scores(
  parts: PartSolvers,
  clusters: Clusters | null,
  work: ScoresWork,
): Checked<ScoresAnswer> {
  if (work.clustered && clusters === null)
    return fail('not-supported', 'The specification names no column of clusters.', {
      remedy: 'Name one: `report: [{sandwich: {cluster: COLUMN}}]`.',
    });
  const at = atPoint(parts, work.point);
  if (!at.ok) return at;
  const { shard, loss, rows } = at.value;
  const pearson = pearsonSum(shard, loss, rows.eta);
  if (!Number.isFinite(pearson)) return notFinite('The sum of squared Pearson residuals');
  const meat = work.meat ? meatOf(at.value) : null;
  const clustered = !work.clustered || clusters === null ? null : clusteredMeat(at.value, clusters);
  const gradient = byCoefficients(at.value, at.value.gradient);
  if ([meat, clustered].some((packed) => packed !== null && !allFinite(packed)))
    return notFinite('A sum of products of scores');
  const clusterCount = work.clustered ? (clusters?.count ?? 0) : 0;
  return succeed({ work: 'scores', problem: work.problem, gradient, meat, clustered, clusterCount, pearson });
}

/** (1/N) Σ s sᵀ; the slopes of a pass hold w · loss′ / N. */
function meatOf(at: AtPoint): Float64Array {
  const { rows, p, rowCountTotal } = at.shard;
  const squares = at.rows.slopes.map((slope) => slope * slope);
  return productsByCoefficients(at, packSymmetric(rows.gram(squares, rowCountTotal), p));
}

function clusteredMeat(at: AtPoint, { count, ofRow }: Clusters): Float64Array {
  const { rows, p, rowCountTotal } = at.shard;
  const sums = new Float64Array(count * p);
  eachRow(rows, (x, from, r) => {
    const to = ofRow[r] * p;
    const slope = at.rows.slopes[r];
    for (let j = 0; j < p; j++) sums[to + j] += slope * x[from + j];
  });
  const gram = rows.kernel.weightedGram(sums, count, p, null, rowCountTotal);
  return productsByCoefficients(at, packSymmetric(gram, p));
}
