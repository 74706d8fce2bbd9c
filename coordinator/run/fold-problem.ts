import { LIMITS } from '../../protocol/limits.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { mergeMoments } from './moments.js';
import type { PooledSurvey, Stop } from './survey.js';

/** Folds with which no cross-validation can be made: too few or too many of them, or one without which nothing varies. */
export function foldProblem(
  { choose, loss }: FitSpecification,
  { folds }: Pick<PooledSurvey, 'folds'>,
): Stop | null {
  if (choose?.kind !== 'folds') return null;
  const refused = (reason: string): Stop => ({
    outcome: 'refused',
    reason: `${reason} [field-value]`,
  });
  const named =
    choose.by.kind === 'column' ? `the fold column ${choose.by.column}` : 'the hash of the row numbers';
  if (folds.length < 2)
    return refused(`${named} makes ${folds.length} fold over all sites; a cross-validation needs two.`);
  if (folds.length > LIMITS.foldsMost)
    return refused(
      `${named} makes ${folds.length} folds over all sites; at most ${LIMITS.foldsMost} may be.`,
    );
  for (const { fold } of folds) {
    const { response } = mergeMoments(
      folds.filter((other) => other.fold !== fold).map(({ moments }) => moments),
    );
    const isConstant = loss.kind === 'logistic' && response.least === response.most;
    const isEmpty = loss.kind === 'poisson' && response.weightedSum === 0;
    if (isConstant || isEmpty || !(response.weightSum > 0))
      return refused(
        `without fold ${fold} every response is the same: choose fewer folds, or a column that mixes them.`,
      );
  }
  return null;
}
