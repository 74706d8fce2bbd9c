import { perTermMultipliers } from '../../protocol/specification/design-columns.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { columnFactor, type Frame, penaltyOf } from './scale.js';

/** Share of the ℓ₁ part below which λ_max is taken as at this share: a ridge alone shrinks every slope, zeroes none. */
const L1_LEAST = 1e-3;

/**
 * The λ of a path, falling and log-spaced: from λ_max, the smallest λ at which all penalised slopes are zero, down to
 * `ratio` times it. λ_max from the gradient of the mean loss at the intercept-only fit, on solver columns (Friedman,
 * Hastie, Tibshirani 2010, §2.5). Null where the gradient vanishes there: nothing is to be chosen.
 */
export function lambdaPath(
  specification: FitSpecification,
  frame: Frame,
  gradient: Float64Array,
): readonly number[] | null {
  const penalty = specification.penalties.find(({ path }) => path !== null);
  if (penalty === undefined || penalty.path === null) throw new TypeError('the specification has no path');
  const { count, ratio } = penalty.path;
  const first = frame.intercept ? 1 : 0;
  const others = specification.penalties.filter((one) => one !== penalty);
  const fixed = penaltyOf(
    others,
    others.map(({ lambda }) => lambda[0]),
    specification,
    frame,
    frame.sd,
  );
  const multipliers = perTermMultipliers(penalty, specification.terms, frame.kept);
  let most = 0;
  multipliers.forEach((multiplier, j) => {
    const weight = Math.max(penalty.l1, L1_LEAST) * multiplier * columnFactor(penalty, frame, frame.sd, j);
    const pull = Math.abs(gradient[first + j]) - fixed.l1[first + j];
    if (weight > 0) most = Math.max(most, pull / weight);
  });
  if (!(most > 0)) return null;
  return Array.from({ length: count }, (_, k) => most * ratio ** (count === 1 ? 0 : k / (count - 1)));
}
