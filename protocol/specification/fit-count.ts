import { LIMITS } from '../limits.js';
import type { FitSpecification } from './types.js';

/** Fits that a profile interval of one coefficient counts as: some on either side of the estimate. */
const FITS_PER_PROFILE = 12;

/**
 * How many fits a run of this specification may hold, by which the limits of a policy are multiplied: every λ on all rows
 * and on the training rows of every fold, and the refits and matrices that its report takes. An upper bound where folds
 * come from a column or sites are not named: their number is not known before the run.
 */
export const fitCount = (specification: FitSpecification): number =>
  lambdaCount(specification) * (1 + foldCount(specification)) + reportFitCount(specification);

/** Values of λ: the lists of several penalties run in parallel. */
export const lambdaCount = ({ penalties }: Pick<FitSpecification, 'penalties'>): number =>
  Math.max(1, ...penalties.map(({ lambda, path }) => path?.count ?? lambda.length));

function foldCount({ choose }: FitSpecification): number {
  if (choose?.kind !== 'folds') return 0;
  return choose.by.kind === 'hash' ? choose.by.folds : LIMITS.foldsMost;
}

function reportFitCount({ report, terms, sites }: FitSpecification): number {
  const { covariance, sandwich, termTests, profile, debiased, margins, compareSites, fitQuality } = report;
  const inference =
    covariance || sandwich !== null || debiased || margins || fitQuality || profile.length > 0;
  // Every site left out once, each site's own fit, and one fit with an intercept for each site.
  const comparison = 'least' in sites ? LIMITS.foldsMost : sites.length;
  return (
    (inference ? 1 : 0) +
    (termTests ? terms.length : 0) +
    profile.length * FITS_PER_PROFILE +
    (compareSites ? comparison + 2 : 0)
  );
}
