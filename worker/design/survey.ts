import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import type { Loss } from '../losses/loss.js';
import type { RawShard } from './shard.js';

/**
 * What a site brings, over the rows used and over those in each fold: unweighted mean and centred sum of squares of each
 * design column, the sums of the response; and remarks.
 */
export function surveyOf(raw: RawShard, loss: Loss): Omit<SurveyAnswer, 'work' | 'allowance'> {
  const { constant, ...moments } = raw.rows.moments(0, raw.rowCount);
  const { labels, starts } = raw.folds ?? { labels: [], starts: [] };
  return {
    ...moments,
    rowsUsed: raw.rowCount,
    rowsDropped: raw.rowsDropped,
    columns: [...raw.columns],
    response: responseSums(raw, loss, 0, raw.rowCount),
    folds: labels.map((fold, k) => {
      const [from, to] = [starts[k], starts[k + 1]];
      const { mean, centredSquares } = raw.rows.moments(from, to);
      return { fold, rowsUsed: to - from, mean, centredSquares, response: responseSums(raw, loss, from, to) };
    }),
    notes: notesOf(raw, constant),
  };
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
