import { noPenalty } from '../../numerics/penalty.js';
import { seededRandom } from '../../numerics/random.js';
import type { LossKind } from '../../protocol/specification/types.js';
import { denseShard } from '../../worker/design/dense-rows.js';
import {
  type BenchProblem,
  drawColumns,
  drawResponse,
  interceptOnly,
  linearPredictor,
  splitRows,
  standardised,
  takeRows,
} from './problems.js';

/** [l1, l2, half width of the box] of every column but the intercept. */
const SHRINKAGE = {
  lasso: [0.01, 0, Number.POSITIVE_INFINITY],
  ridge: [0, 0.01, Number.POSITIVE_INFINITY],
  'weak-ridge': [0, 1e-3, Number.POSITIVE_INFINITY],
  'elastic-net': [0.005, 0.01, Number.POSITIVE_INFINITY],
  box: [0, 0, 0.2],
  none: [0, 0, Number.POSITIVE_INFINITY],
} as const;

interface Choice {
  readonly losses: readonly LossKind[];
  readonly shrinkages: readonly (keyof typeof SHRINKAGE)[];
}

/** Penalised, so that an optimum exists. */
const PENALISED: Choice = {
  losses: ['squared', 'logistic', 'poisson'],
  shrinkages: ['lasso', 'ridge', 'weak-ridge', 'elastic-net'],
};

/** Everything: some of these problems have no optimum, or more than one. */
const ANY: Choice = {
  losses: ['squared', 'logistic', 'poisson', 'huber'],
  shrinkages: [...PENALISED.shrinkages, 'box', 'none'],
};

/** A random problem from its seed: every loss, penalty, split, correlation, site count, indicator columns among them. */
export const makeRandomProblem = (seed: number, loss?: LossKind): BenchProblem =>
  drawProblem(seed, loss === undefined ? PENALISED : { ...PENALISED, losses: [loss] }, loss === undefined);

/** The same with Huber's loss, boxes and no penalty at all among them. */
export const makeFuzzProblem = (seed: number): BenchProblem => drawProblem(seed, ANY, true);

function drawProblem(seed: number, { losses, shrinkages }: Choice, drawsLoss: boolean): BenchProblem {
  const random = seededRandom(seed);
  const pick = <T>(values: readonly T[]): T => values[random.integer(values.length)];
  const kind = drawsLoss ? pick(losses) : losses[0];
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
  const pooled = denseShard({ rowCount: rows, p, x, y, weights: null, offset, rowCountTotal: rows });
  const penalty = noPenalty(p);
  const shrink = pick(shrinkages);
  const [l1, l2, width] = SHRINKAGE[shrink];
  penalty.l1.fill(l1, 1);
  penalty.l2.fill(l2, 1);
  penalty.lower.fill(-width, 1);
  penalty.upper.fill(width, 1);
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
