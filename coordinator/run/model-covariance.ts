import { inverseOf } from '../inference/covariance.js';
import type { Description } from './description.js';
import type { Grounds } from './problems.js';
import type { InferenceDocument } from './result-parts.js';

/** Whether likelihood-ratio tests and the inverse information mean anything: no penalty, and a loss that is a likelihood. */
export const hasLikelihood = ({ specification: { penalties, loss } }: Grounds): boolean =>
  penalties.length === 0 && loss.kind !== 'huber';

/** Rows less what the model spends: solver columns, and an intercept per site that stays there. */
export const residualDegrees = ({ specification, survey, frame, roster }: Grounds): number =>
  survey.rowsTotal - frame.p - (specification.intercept === 'per-site' ? roster.length : 0);

/** RSS / (N − p) of a squared loss; 1 otherwise. */
export function dispersionOf(
  grounds: Grounds,
  { end }: Pick<Description, 'end'>,
): InferenceDocument['dispersion'] {
  if (grounds.specification.loss.kind !== 'squared') return { kind: 'fixed', value: 1 };
  return { kind: 'residual', value: (2 * grounds.survey.rowsTotal * end.loss) / residualDegrees(grounds) };
}

/**
 * Inverse information times the dispersion: the covariance of θ, row-major p × p. Null where the curvature at the fit is
 * not known or singular.
 */
export function modelCovariance(grounds: Grounds, description: Description): Float64Array | null {
  const { curvature } = description;
  const inverse = curvature === null ? null : inverseOf(curvature, grounds.frame.p);
  if (inverse === null) return null;
  const scale = dispersionOf(grounds, description).value / grounds.survey.rowsTotal;
  return inverse.map((entry) => entry * scale);
}
