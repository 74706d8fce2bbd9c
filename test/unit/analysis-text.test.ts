import { expect, test } from 'vitest';
import { specificationText } from '../../coordinator/report/specification-text.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { breaksWith, parsedValue } from '../support/specifications.js';

/** What `check` says of the document, on one line. */
function said(text: string): string {
  const spec = parsedValue(parseFitSpecification(text, 'breaks.fit.yaml'));
  return specificationText(spec, designColumns(spec), 'd', 100).join(' ').replaceAll(/\s+/g, ' ');
}

const path = (...added: string[]) =>
  said(breaksWith({ 13: '  - {kind: lasso, lambda: {count: 20}}' }, added));

test('a path says how many λ it has and where they lie', () => {
  expect(path()).toContain(
    'Penalty lasso, 20 values of λ, log-spaced from the least that zeroes every slope down to 0.001 times it, a fit each',
  );
});

test('a choice says what is held out and which fit is taken', () => {
  expect(path('choose: {folds: 5, seed: 7}')).toContain(
    'Every fit is made again without each fold and its loss taken on the rows held out, in 5 folds, to which a hash with seed 7 deals the rows of every site; the fit with the largest λ within one standard error of the least loss is chosen.',
  );
  expect(path('choose: {folds: {column: year}, rule: minimum}')).toContain(
    'in folds by the values of year; the fit with the least loss is chosen.',
  );
  expect(path('choose: {criterion: bic}')).toContain(
    'Of the fits the one with the least Bayesian information criterion (BIC) is chosen.',
  );
});

test('a report says what it holds, and nothing where it is empty', () => {
  expect(said(breaksWith({}))).not.toContain('Reports');
  expect(said(breaksWith({}, ['report: [sandwich: {cluster: zone}, profile: [age_years]]']))).toContain(
    'Reports as well: covariances, standard errors and intervals; sandwich covariances, clustered by zone within sites as well; profile intervals of age_years.',
  );
});

test('an intercept for each site is said to stay there', () => {
  expect(said(breaksWith({}, ['intercept: per-site']))).toContain(
    'and an intercept of its own for every site, which never leaves it:',
  );
});
