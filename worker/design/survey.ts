import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import type { Loss } from '../losses/loss.js';
import type { RawShard } from './shard.js';

/**
 * What a site brings, over the rows used and over those in each fold: unweighted mean and centred sum of squares of each
 * design column, the sums of the response; and remarks. Two passes with the correction of Chan, Golub and LeVeque (1983, Am. Stat. 37:242), whose
 * error does not grow with the size of the mean.
 */
export function surveyOf(raw: RawShard, loss: Loss): Omit<SurveyAnswer, 'work' | 'allowance'> {
  const { constant, ...moments } = momentsOf(raw, 0, raw.rowCount);
  const { labels, starts } = raw.folds ?? { labels: [], starts: [] };
  return {
    ...moments,
    rowsDropped: raw.rowsDropped,
    columns: [...raw.columns],
    response: responseSums(raw, loss, 0, raw.rowCount),
    folds: labels.map((fold, k) => {
      const [from, to] = [starts[k], starts[k + 1]];
      const { rowsUsed, mean, centredSquares } = momentsOf(raw, from, to);
      return { fold, rowsUsed, mean, centredSquares, response: responseSums(raw, loss, from, to) };
    }),
    notes: notesOf(raw, constant),
  };
}

/** Over the rows from ≤ r < to, at least one. */
function momentsOf(
  raw: RawShard,
  from: number,
  to: number,
): { rowsUsed: number; mean: Float64Array; centredSquares: Float64Array; constant: boolean[] } {
  const rowCount = to - from;
  const { columns } = raw;
  const p = columns.length;
  const x = raw.x.subarray(from * p, to * p);
  const mean = new Float64Array(p);
  for (let at = 0; at < x.length; at += p) for (let j = 0; j < p; j++) mean[j] += x[at + j];
  for (let j = 0; j < p; j++) mean[j] /= rowCount;
  const rest = new Float64Array(p);
  const centredSquares = new Float64Array(p);
  const constant = columns.map(() => true);
  for (let at = 0; at < x.length; at += p)
    for (let j = 0; j < p; j++) {
      const away = x[at + j] - mean[j];
      rest[j] += away;
      centredSquares[j] += away * away;
      if (x[at + j] !== x[j]) constant[j] = false;
    }
  for (let j = 0; j < p; j++) {
    // a constant column has no spread at all, which rounding of the mean must not hide
    if (constant[j]) {
      mean[j] = x[j];
      centredSquares[j] = 0;
      continue;
    }
    centredSquares[j] = Math.max(0, centredSquares[j] - (rest[j] * rest[j]) / rowCount);
    mean[j] += rest[j] / rowCount;
  }
  return { rowsUsed: rowCount, mean, centredSquares, constant };
}

function responseSums(
  { y, weights, offset }: RawShard,
  loss: Loss,
  from: number,
  to: number,
): SurveyAnswer['response'] {
  let weightSum = 0;
  let weightedSum = 0;
  let exposureSum = 0;
  let saturatedLoss = 0;
  let least = y[from];
  let most = y[from];
  for (let row = from; row < to; row++) {
    const weight = weights?.[row] ?? 1;
    weightSum += weight;
    weightedSum += weight * y[row];
    exposureSum += weight * (offset === null ? 1 : Math.exp(offset[row]));
    saturatedLoss += weight * loss.saturated(y[row]);
    least = Math.min(least, y[row]);
    most = Math.max(most, y[row]);
  }
  return { weightSum, weightedSum, exposureSum, least, most, saturatedLoss };
}

const columnsListedMost = 20;

/** Only what the moments and counts of the same answer show anyway. */
function notesOf(raw: RawShard, constant: readonly boolean[]): string[] {
  const notes: string[] = [];
  const flat = raw.columns.filter((_, j) => constant[j]);
  if (flat.length > 0) {
    const more = flat.length > columnsListedMost ? ` and ${flat.length - columnsListedMost} more` : '';
    notes.push(`No spread at this site: ${flat.slice(0, columnsListedMost).join(', ')}${more}.`);
  }
  if (raw.y.every((value) => value === raw.y[0])) notes.push('Every row has the same response.');
  if (raw.weights?.every((weight) => weight === 0)) notes.push('Every row has weight zero.');
  const [only, ...others] = raw.folds?.labels ?? [];
  if (only !== undefined && others.length === 0) notes.push(`Every row is in fold ${only}.`);
  if (raw.rowsDropped > 0) notes.push(`Rows left out for a missing value: ${raw.rowsDropped}.`);
  return notes;
}
