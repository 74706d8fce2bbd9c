import { once } from 'node:events';
import { createWriteStream } from 'node:fs';
import { seededRandom } from '../../numerics/random.js';
import type { LossKind } from '../../protocol/specification/types.js';

/** A whole fit to time: two sites, numeric columns, one λ. */
export interface FitProblem {
  readonly name: string;
  readonly loss: Extract<LossKind, 'squared' | 'logistic' | 'poisson'>;
  readonly rowCount: number;
  readonly columns: number;
  readonly lambda: number;
  /** Share of the lasso in the penalty. */
  readonly l1: number;
  /** A path of 30 λ instead of one, and a choice by so many folds; 0: one fit. */
  readonly folds: number;
  /** `curvature-most` of the sites: 3 is what custodians let leave unless they say otherwise. */
  readonly matrices: 3 | 'any';
}

export const FIT_PROBLEMS: readonly FitProblem[] = [
  {
    name: 'logistic lasso 1e5×100',
    loss: 'logistic',
    rowCount: 100_000,
    columns: 100,
    lambda: 0.005,
    l1: 1,
    folds: 0,
    matrices: 3,
  },
  {
    name: 'squared elastic net 1e6×50',
    loss: 'squared',
    rowCount: 1_000_000,
    columns: 50,
    lambda: 0.02,
    l1: 0.5,
    folds: 0,
    matrices: 3,
  },
  {
    name: 'Poisson with exposure 2e5×50',
    loss: 'poisson',
    rowCount: 200_000,
    columns: 50,
    lambda: 0,
    l1: 0,
    folds: 0,
    matrices: 'any',
  },
  {
    name: 'path of 30 λ with 5 folds, logistic lasso 3e3×50',
    loss: 'logistic',
    rowCount: 3000,
    columns: 50,
    lambda: 0,
    l1: 1,
    folds: 5,
    matrices: 'any',
  },
];

/** The pooled rows, as both programs read them; x is row-major. */
export interface FitRows {
  readonly x: Float64Array;
  readonly y: Float64Array;
  readonly exposure: Float64Array;
}

/** Neighbouring columns correlate. */
const CORRELATION = 0.4;

export function drawRows({ loss, rowCount, columns }: FitProblem): FitRows {
  const random = seededRandom(20_261_201);
  const truth = Float64Array.from({ length: columns }, (_, j) => (j % 4 === 0 ? 0.5 / (1 + j / 8) : 0));
  const x = new Float64Array(rowCount * columns);
  const y = new Float64Array(rowCount);
  const exposure = new Float64Array(rowCount).fill(1);
  const fresh = Math.sqrt(1 - CORRELATION * CORRELATION);
  for (let r = 0; r < rowCount; r++) {
    let eta = -0.5;
    for (let j = 0; j < columns; j++) {
      const before = j === 0 ? random.normal() : x[r * columns + j - 1];
      // four decimals: both programs read the very same numbers
      const value = Math.round(1e4 * (CORRELATION * before + fresh * random.normal())) / 1e4;
      x[r * columns + j] = value;
      eta += truth[j] * value;
    }
    if (loss === 'poisson') exposure[r] = Math.round(100 * (0.5 + random.uniform())) / 100;
    if (loss === 'squared') y[r] = Math.round(1e4 * (eta + random.normal())) / 1e4;
    else if (loss === 'logistic') y[r] = Number(random.uniform() < 1 / (1 + Math.exp(-eta)));
    else y[r] = random.poisson(exposure[r] * Math.exp(Math.min(eta, 3)));
  }
  return { x, y, exposure };
}

/** Rows from ≤ r < to as a CSV file. */
export async function writeRows(
  file: string,
  { x, y, exposure }: FitRows,
  columns: number,
  from: number,
  to: number,
): Promise<void> {
  const out = createWriteStream(file);
  out.write(`${['y', 'exposure', ...columnNames(columns)].join(',')}\n`);
  for (let start = from; start < to; start += 1000) {
    const lines: string[] = [];
    for (let r = start; r < Math.min(start + 1000, to); r++)
      lines.push([y[r], exposure[r], ...x.subarray(r * columns, (r + 1) * columns)].join(','));
    if (!out.write(`${lines.join('\n')}\n`)) await once(out, 'drain');
  }
  out.end();
  await once(out, 'finish');
}

export const columnNames = (columns: number): string[] =>
  Array.from({ length: columns }, (_, j) => `x${j + 1}`);

/** The objective of a fit, intercept first: mean loss and penalty on columns of spread 1 (mathematics as in the README). */
export function objectiveOf(problem: FitProblem, rows: FitRows, coefficients: readonly number[]): number {
  const { loss, rowCount, columns, lambda, l1 } = problem;
  const { x, y, exposure } = rows;
  const sums = new Float64Array(columns);
  const squares = new Float64Array(columns);
  let total = 0;
  for (let r = 0; r < rowCount; r++) {
    let eta = coefficients[0] + (loss === 'poisson' ? Math.log(exposure[r]) : 0);
    for (let j = 0; j < columns; j++) {
      const value = x[r * columns + j];
      eta += coefficients[j + 1] * value;
      sums[j] += value;
      squares[j] += value * value;
    }
    if (loss === 'squared') total += 0.5 * (y[r] - eta) ** 2;
    else if (loss === 'logistic')
      total += Math.max(eta, 0) + Math.log1p(Math.exp(-Math.abs(eta))) - y[r] * eta;
    else total += Math.exp(eta) - y[r] * eta;
  }
  let penalty = 0;
  for (let j = 0; j < columns; j++) {
    const spread = Math.sqrt(squares[j] / rowCount - (sums[j] / rowCount) ** 2);
    const scaled = Math.abs(coefficients[j + 1]) * spread;
    penalty += l1 * scaled + 0.5 * (1 - l1) * scaled * scaled;
  }
  return total / rowCount + lambda * penalty;
}
