import { noPenalty } from '../../coordinator/consensus/penalty.js';
import { seededRandom } from '../../numerics/random.js';
import type { Shard } from '../../worker/design/shard.js';
import {
  type BenchProblem,
  drawColumns,
  drawResponse,
  interceptOnly,
  type LossKind,
  linearPredictor,
  splitRows,
  standardised,
  takeRows,
} from './problems.js';

/** A random problem from its seed: every loss, penalty, split, correlation, site count, indicator columns among them. */
export function makeRandomProblem(seed: number, loss?: LossKind): BenchProblem {
  const random = seededRandom(seed);
  const pick = <T>(values: readonly T[]): T => values[random.integer(values.length)];
  const kind = loss ?? pick<LossKind>(['squared', 'logistic', 'poisson']);
  const columns = 2 + random.integer(11);
  const sites = pick([2, 3, 4, 8]);
  const rows = pick([80, 150, 300]);
  const correlation = pick([0, 0.5, 0.95]);
  const design = random.uniform() < 0.4 ? 'levels' : 'well';
  const x = standardised(drawColumns(random, { rows, columns, correlation }, design), rows, columns);
  const p = columns + 1;
  const size = pick([0.3, 1, 2]);
  const truth = Float64Array.from({ length: columns }, () => (size * random.normal()) / Math.sqrt(columns));
  const { y, offset } = drawResponse(random, kind, linearPredictor(x, rows, p, truth));
  // both classes, and a count, so that the intercept-only fit exists
  y[0] = 1;
  y[1] = 0;
  const pooled: Shard = { rowCount: rows, p, x, y, weights: null, offset, rowCountTotal: rows };
  const penalty = noPenalty(p);
  const shrink = pick(['lasso', 'ridge', 'weak-ridge', 'elastic-net'] as const);
  const [l1, l2] = {
    lasso: [0.01, 0],
    ridge: [0, 0.01],
    'weak-ridge': [0, 1e-3],
    'elastic-net': [0.005, 0.01],
  }[shrink];
  penalty.l1.fill(l1, 1);
  penalty.l2.fill(l2, 1);
  const split = pick(['random', 'by-response', 'by-covariate', 'sizes', 'sizes-by-response'] as const);
  const parts = splitRows(random, split, sites, y, x, p).filter((part) => part.length > 0);
  return {
    name: `${seed}: ${kind} ${shrink} ${split}, ${rows} rows, ${columns} columns (${design}, correlation ${correlation}), ${sites} sites`,
    loss: kind,
    p,
    pooled,
    shards: parts.map((part) => takeRows(pooled, part)),
    penalty,
    start: interceptOnly(kind, y, offset, p),
  };
}
