import { noPenalty, type Penalty } from '../../numerics/penalty.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import type { LossKind } from '../../protocol/specification/types.js';
import { denseShard } from '../../worker/design/dense-rows.js';
import type { Shard } from '../../worker/design/shard.js';
import { entriesOf } from '../support/dense.js';

/** One problem of the suite: rows already in solver columns (column 0 the intercept), split over sites. */
export interface BenchProblem {
  readonly name: string;
  readonly loss: LossKind;
  readonly p: number;
  readonly shards: readonly Shard[];
  readonly pooled: Shard;
  readonly penalty: Penalty;
  readonly start: Float64Array;
}

export type DesignKind = 'well' | 'correlated' | 'small' | 'scales' | 'levels' | 'few' | 'wide' | 'extreme';
export type PenaltyKind = 'none' | 'ridge' | 'weak-ridge' | 'lasso' | 'elastic-net' | 'box';
export type SplitKind = 'random' | 'by-response' | 'by-covariate' | 'sizes' | 'sizes-by-response';

/**
 * `loss design penalty split sites`, the whole suite. Each is made from its own seed, so that order does not matter.
 * Designs: `well` and `small` conditioned, `correlated` (first-order autoregressive, 0.95), `scales` from 1 to 1000 with
 * means far from zero, `levels` (indicators, some rare, so that sites lack levels), `few` rows (fewer at a site than
 * columns), `wide` (400 rows, 1000 columns), `extreme` effects (classes nearly separated). A logistic split by the
 * response leaves sites with a single class.
 */
export const SUITE: readonly string[] = [
  'squared well lasso random 8',
  'squared well none random 4',
  'squared correlated lasso random 8',
  'squared correlated none random 8',
  'squared correlated elastic-net by-covariate 8',
  'squared correlated box random 4',
  'squared scales lasso random 8',
  'squared levels ridge sizes 32',
  'squared wide lasso random 4',
  'logistic well ridge random 8',
  'logistic well lasso random 2',
  'logistic well lasso random 32',
  'logistic well ridge sizes-by-response 8',
  'logistic well weak-ridge random 4',
  'logistic well elastic-net by-response 8',
  'logistic scales lasso by-covariate 8',
  'logistic correlated lasso random 8',
  'logistic correlated ridge random 8',
  'logistic correlated lasso by-response 8',
  'logistic correlated lasso by-covariate 8',
  'logistic correlated lasso sizes 8',
  'logistic correlated elastic-net sizes 32',
  'logistic correlated box random 8',
  'logistic extreme weak-ridge random 4',
  'logistic extreme lasso by-response 8',
  'logistic levels lasso by-covariate 8',
  'logistic levels ridge by-response 4',
  'logistic few ridge random 8',
  'logistic few lasso by-response 32',
  'logistic small none random 4',
  'poisson small ridge random 8',
  'poisson small lasso by-response 8',
  'poisson small ridge by-covariate 8',
  'poisson small lasso sizes 8',
  'poisson small none random 2',
  'poisson scales ridge random 8',
  'poisson levels elastic-net random 4',
  'poisson levels lasso by-covariate 32',
  'poisson correlated elastic-net random 8',
  'poisson correlated ridge sizes-by-response 8',
  'huber small lasso random 8',
  'huber correlated lasso random 8',
  'huber small lasso by-response 8',
  'huber correlated box sizes 8',
];

const SHAPES: Record<DesignKind, { rows: number; columns: number; correlation: number }> = {
  well: { rows: 3000, columns: 50, correlation: 0.2 },
  correlated: { rows: 3000, columns: 50, correlation: 0.95 },
  small: { rows: 3000, columns: 30, correlation: 0.2 },
  scales: { rows: 3000, columns: 40, correlation: 0.5 },
  wide: { rows: 400, columns: 1000, correlation: 0.5 },
  extreme: { rows: 1000, columns: 20, correlation: 0.3 },
  levels: { rows: 2000, columns: 24, correlation: 0.3 },
  few: { rows: 240, columns: 40, correlation: 0.3 },
};

export function makeProblem(name: string): BenchProblem {
  const [loss, design, penalty, split, sites] = name.split(' ') as [
    LossKind,
    DesignKind,
    PenaltyKind,
    SplitKind,
    string,
  ];
  const random = seededRandom(seedOf(name));
  const shape = SHAPES[design];
  const raw = drawColumns(random, shape, design);
  const x = standardised(raw, shape.rows, shape.columns);
  const p = shape.columns + 1;
  const sparse = penalty === 'lasso' || penalty === 'elastic-net';
  const truth = drawTruth(random, shape.columns, sparse, design);
  const eta = linearPredictor(x, shape.rows, p, truth);
  const { y, offset } = drawResponse(random, loss, eta);
  const pooled = denseShard({
    rowCount: shape.rows,
    p,
    x,
    y,
    weights: null,
    offset,
    rowCountTotal: shape.rows,
  });
  const parts = splitRows(random, split, Number(sites), y, x, p);
  return {
    name,
    loss,
    p,
    pooled,
    shards: parts.map((rows) => takeRows(pooled, rows)),
    penalty: makePenalty(penalty, x, y, p, design),
    start: interceptOnly(loss, y, offset, p),
  };
}

/** FNV-1a: a seed from a name, so that adding a problem does not change another. */
export function seedOf(name: string): number {
  let hash = 2166136261;
  for (const byte of new TextEncoder().encode(name)) hash = Math.imul(hash ^ byte, 16777619);
  return hash >>> 0;
}

/** First-order autoregressive columns; a `levels` design turns the last two thirds into indicators, some of them rare. */
export function drawColumns(
  random: Random,
  shape: { rows: number; columns: number; correlation: number },
  design: DesignKind,
): Float64Array {
  const { rows, columns, correlation } = shape;
  const out = new Float64Array(rows * columns);
  const fresh = Math.sqrt(1 - correlation * correlation);
  for (let i = 0; i < rows; i++) {
    let last = random.normal();
    for (let j = 0; j < columns; j++) {
      if (j > 0) last = correlation * last + fresh * random.normal();
      const indicator = design === 'levels' && j >= columns / 3;
      out[i * columns + j] = indicator ? Number(last > [0, 1, 1.8][j % 3]) : last;
    }
  }
  if (design !== 'scales') return out;
  const order = random.permutation(columns);
  for (let j = 0; j < columns; j++) {
    const size = 1000 ** (order[j] / (columns - 1));
    for (let i = 0; i < rows; i++) out[i * columns + j] = size * (7 + out[i * columns + j]);
  }
  return out;
}

/** Row-major with an intercept column; the other columns centred and scaled over all rows. */
export function standardised(raw: Float64Array, rows: number, columns: number): Float64Array {
  const p = columns + 1;
  const x = new Float64Array(rows * p);
  for (let i = 0; i < rows; i++) x[i * p] = 1;
  for (let j = 0; j < columns; j++) {
    let mean = 0;
    for (let i = 0; i < rows; i++) mean += raw[i * columns + j] / rows;
    let square = 0;
    for (let i = 0; i < rows; i++) square += (raw[i * columns + j] - mean) ** 2 / rows;
    const sd = square > 0 ? Math.sqrt(square) : 1;
    for (let i = 0; i < rows; i++) x[i * p + j + 1] = (raw[i * columns + j] - mean) / sd;
  }
  return x;
}

function drawTruth(random: Random, columns: number, sparse: boolean, design: DesignKind): Float64Array {
  const kept = design === 'wide' ? 15 : sparse ? Math.ceil(columns / 2) : columns;
  const size = design === 'extreme' ? 6 : 1;
  const order = random.permutation(columns);
  const truth = new Float64Array(columns);
  for (let k = 0; k < kept; k++) truth[order[k]] = (size * random.normal()) / Math.sqrt(kept);
  return truth;
}

export function linearPredictor(x: Float64Array, rows: number, p: number, truth: Float64Array): Float64Array {
  const eta = new Float64Array(rows);
  for (let i = 0; i < rows; i++) for (let j = 1; j < p; j++) eta[i] += x[i * p + j] * truth[j - 1];
  return eta;
}

export function drawResponse(
  random: Random,
  loss: LossKind,
  eta: Float64Array,
): { y: Float64Array; offset: Float64Array | null } {
  if (loss === 'squared') return { y: eta.map((value) => 1 + value + 0.7 * random.normal()), offset: null };
  // Student's t with 1.5 degrees of freedom: residuals far beyond the threshold
  if (loss === 'huber')
    return {
      y: eta.map((value) => 1 + value + 0.5 * random.normal() * Math.sqrt(0.75 / random.gamma(0.75))),
      offset: null,
    };
  if (loss === 'logistic')
    return {
      y: eta.map((value) => Number(random.uniform() < 1 / (1 + Math.exp(0.5 - 1.5 * value)))),
      offset: null,
    };
  const offset = eta.map(() => Math.log(3 * random.gamma(1) + 0.05));
  const y = eta.map((value, i) =>
    random.poisson(Math.exp(Math.min(Math.max(offset[i] + 0.2 + 0.5 * value, -20), 6))),
  );
  return { y, offset };
}

export function splitRows(
  random: Random,
  split: SplitKind,
  sites: number,
  y: Float64Array,
  x: Float64Array,
  p: number,
): Int32Array[] {
  const rows = y.length;
  const sizes =
    split === 'sizes' || split === 'sizes-by-response'
      ? Array.from({ length: sites }, (_, k) => 100 ** (k / (sites - 1)))
      : Array.from({ length: sites }, () => 1);
  const total = sizes.reduce((sum, size) => sum + size, 0);
  const order = random.permutation(rows);
  if (split === 'by-response' || split === 'sizes-by-response') order.sort((a, b) => y[a] - y[b] || a - b);
  if (split === 'by-covariate') order.sort((a, b) => x[a * p + 1] - x[b * p + 1] || a - b);
  let reached = 0;
  return sizes.map((size) => {
    const from = Math.round((reached / total) * rows);
    reached += size;
    return order.slice(from, Math.round((reached / total) * rows));
  });
}

export function takeRows(pooled: Shard, rows: Int32Array): Shard {
  const { p } = pooled;
  const from = entriesOf(pooled);
  const x = new Float64Array(rows.length * p);
  const y = new Float64Array(rows.length);
  const offset = pooled.offset === null ? null : new Float64Array(rows.length);
  rows.forEach((row, i) => {
    x.set(from.subarray(row * p, row * p + p), i * p);
    y[i] = pooled.y[row];
    if (offset !== null && pooled.offset !== null) offset[i] = pooled.offset[row];
  });
  const { rowCountTotal } = pooled;
  return denseShard({ rowCount: rows.length, p, x, y, weights: null, offset, rowCountTotal });
}

/** λ as a share of the least λ that leaves no slope (of a squared loss), as is usual; the intercept is free. */
function makePenalty(
  kind: PenaltyKind,
  x: Float64Array,
  y: Float64Array,
  p: number,
  design: DesignKind,
): Penalty {
  const penalty = noPenalty(p);
  const rows = y.length;
  const mean = y.reduce((sum, value) => sum + value, 0) / rows;
  let most = 0;
  for (let j = 1; j < p; j++) {
    let sum = 0;
    for (let i = 0; i < rows; i++) sum += (x[i * p + j] * (y[i] - mean)) / rows;
    most = Math.max(most, Math.abs(sum));
  }
  const lambda = (design === 'wide' ? 0.1 : 0.03) * most;
  const weights: Record<PenaltyKind, [number, number]> = {
    none: [0, 0],
    ridge: [0, 1e-2],
    'weak-ridge': [0, 1e-4],
    lasso: [lambda, 0],
    'elastic-net': [lambda / 2, lambda / 2],
    box: [0, 0],
  };
  if (kind === 'box') {
    penalty.lower.fill(-0.1, 1);
    penalty.upper.fill(0.1, 1);
  }
  const [l1, l2] = weights[kind];
  penalty.l1.fill(l1, 1);
  penalty.l2.fill(l2, 1);
  return penalty;
}

export function interceptOnly(
  loss: LossKind,
  y: Float64Array,
  offset: Float64Array | null,
  p: number,
): Float64Array {
  const start = new Float64Array(p);
  const sum = y.reduce((total, value) => total + value, 0);
  const mean = sum / y.length;
  if (loss === 'squared' || loss === 'huber') start[0] = mean;
  if (loss === 'logistic') start[0] = Math.log(mean / (1 - mean));
  if (loss === 'poisson') {
    const exposure = (offset ?? new Float64Array(y.length)).reduce(
      (total, value) => total + Math.exp(value),
      0,
    );
    start[0] = Math.log(sum / exposure);
  }
  return start;
}
