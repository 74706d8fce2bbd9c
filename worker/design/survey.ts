import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import type { Loss } from '../losses/loss.js';
import type { RawShard } from './shard.js';

/**
 * What a site brings, over the rows used: unweighted mean and centred sum of squares of each design column, the sums of
 * the response, and remarks. Two passes with the correction of Chan, Golub and LeVeque (1983, Am. Stat. 37:242), whose
 * error does not grow with the size of the mean.
 */
export function surveyOf(raw: RawShard, loss: Loss): Omit<SurveyAnswer, 'work' | 'allowance'> {
  const { mean, centredSquares, constant } = momentsOf(raw);
  return {
    rowsUsed: raw.rowCount,
    rowsDropped: raw.rowsDropped,
    columns: [...raw.columns],
    mean,
    centredSquares,
    response: responseSums(raw, loss),
    notes: notesOf(raw, constant),
  };
}

function momentsOf({ x, rowCount, columns }: RawShard): {
  mean: Float64Array;
  centredSquares: Float64Array;
  constant: boolean[];
} {
  const p = columns.length;
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
  return { mean, centredSquares, constant };
}

function responseSums({ y, weights, offset, rowCount }: RawShard, loss: Loss): SurveyAnswer['response'] {
  let weightSum = 0;
  let weightedSum = 0;
  let exposureSum = 0;
  let saturatedLoss = 0;
  let least = y[0];
  let most = y[0];
  for (let row = 0; row < rowCount; row++) {
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
  if (raw.rowsDropped > 0) notes.push(`Rows left out for a missing value: ${raw.rowsDropped}.`);
  return notes;
}
