import type { SurveyAnswer } from '../../protocol/messages/survey.js';

/** Counts, moments of the design columns and sums of the response over some rows, as a survey answer holds them. */
export type Moments = Pick<SurveyAnswer, 'rowsUsed' | 'mean' | 'centredSquares' | 'response'>;

/** Moments of all rows from those of disjoint parts, merged pairwise in the order given (Chan, Golub, LeVeque 1983). */
export function mergeMoments(parts: readonly Moments[]): Moments {
  const [first, ...others] = parts.filter(({ rowsUsed }) => rowsUsed > 0);
  if (first === undefined) return parts[0];
  const mean = Float64Array.from(first.mean);
  const centredSquares = Float64Array.from(first.centredSquares);
  const response = { ...first.response };
  let rows = first.rowsUsed;
  for (const next of others) {
    const total = rows + next.rowsUsed;
    for (let j = 0; j < mean.length; j++) {
      const apart = next.mean[j] - mean[j];
      mean[j] += (apart * next.rowsUsed) / total;
      centredSquares[j] += next.centredSquares[j] + (apart * apart * rows * next.rowsUsed) / total;
    }
    rows = total;
    response.weightSum += next.response.weightSum;
    response.weightedSum += next.response.weightedSum;
    response.exposureSum += next.response.exposureSum;
    response.saturatedLoss += next.response.saturatedLoss;
    response.least = Math.min(response.least, next.response.least);
    response.most = Math.max(response.most, next.response.most);
  }
  return { rowsUsed: rows, mean, centredSquares, response };
}

/** 1/N standard deviations. */
export const spreadOf = ({ centredSquares, rowsUsed }: Moments): Float64Array =>
  centredSquares.map((square) => Math.sqrt(square / rowsUsed));
