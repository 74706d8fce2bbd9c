import type { Choice, FitSpecification, Penalty, ReportParts } from '../../protocol/specification/types.js';
import { listed } from './phrases.js';

/** What a specification asks beside one fit, in words: its intercept, several λ, the choice among fits, the report. */

export function interceptText(intercept: FitSpecification['intercept']): string {
  switch (intercept) {
    case 'shared':
      return ', and a shared intercept';
    case 'per-site':
      return ', and an intercept of its own for every site, which never leaves it';
    case 'none':
      return ', without an intercept';
  }
}

export function lambdaText({ lambda, path }: Pick<Penalty, 'lambda' | 'path'>): string {
  if (path !== null)
    return `${path.count} values of λ, log-spaced from the least that zeroes every slope down to ${path.ratio} times it, a fit each`;
  return lambda.length === 1
    ? `λ = ${lambda[0]}`
    : `λ = ${listed(lambda.map(String), 6)}, ${lambda.length} fits`;
}

const CRITERIA = {
  aic: 'Akaike information criterion (AIC)',
  bic: 'Bayesian information criterion (BIC)',
  'extended-bic': 'extended Bayesian information criterion (EBIC)',
} as const;

export function chooseText(choice: Choice): string {
  if (choice.kind === 'criterion')
    return `Of the fits the one with the least ${CRITERIA[choice.criterion]} is chosen.`;
  const { by, rule } = choice;
  const folds =
    by.kind === 'hash'
      ? `in ${by.folds} folds, to which a hash with seed ${by.seed} deals the rows of every site`
      : `in folds by the values of ${by.column}`;
  const chosen =
    rule === 'minimum'
      ? 'the fit with the least loss is chosen'
      : 'the fit with the largest λ within one standard error of the least loss is chosen';
  return `Every fit is made again without each fold and its loss taken on the rows held out, ${folds}; ${chosen}.`;
}

/** Nothing where the report asks for nothing. */
export function reportText(report: ReportParts): string[] {
  const cluster = report.sandwich?.cluster ?? null;
  const parts = [
    report.covariance ? 'covariances, standard errors and intervals' : null,
    report.sandwich === null
      ? null
      : `sandwich covariances${cluster === null ? '' : `, clustered by ${cluster} within sites as well`}`,
    report.termTests ? 'likelihood-ratio tests of every term' : null,
    report.profile.length === 0 ? null : `profile intervals of ${listed([...report.profile], 6)}`,
    report.debiased ? 'de-biased intervals of the penalised fit' : null,
    report.margins ? 'mean predictions and effects' : null,
    report.compareSites ? 'a comparison of the sites' : null,
    report.fitQuality ? 'figures of fit quality' : null,
  ].filter((part) => part !== null);
  return parts.length === 0 ? [] : [`Reports as well: ${parts.join('; ')}.`];
}
