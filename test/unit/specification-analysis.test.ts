/** Paths of λ, the choice among fits, reports and intercepts per site. */
import { describe, expect, test } from 'vitest';
import { fitCount, lambdaCount } from '../../protocol/specification/fit-count.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { breaksWith, failuresOf, marks, NO_REPORT, parsedValue } from '../support/specifications.js';

const parse = (text: string) => parsedValue(parseFitSpecification(text, 'breaks.fit.yaml'));
const failures = (text: string) => failuresOf(parseFitSpecification(text, 'breaks.fit.yaml'));

const withLambda = (lambda: string, added: readonly string[] = []) =>
  breaksWith({ 13: `  - {kind: lasso, lambda: ${lambda}}` }, added);
const twoFits = (...added: string[]) => withLambda('[1, 0.1]', added);
const oneFit = (...added: string[]) => breaksWith({}, added);
const unpenalised = (...added: string[]) => breaksWith({ 12: '', 13: '' }, added);

describe('a path of λ', () => {
  test('is kept as a count and a ratio, with 30 and 1e-3 as defaults', () => {
    expect(parse(withLambda('{count: 20, ratio: 0.01}')).penalties[0]).toMatchObject({
      lambda: [],
      path: { count: 20, ratio: 0.01 },
    });
    expect(parse(withLambda('{}')).penalties[0]?.path).toEqual({ count: 30, ratio: 1e-3 });
  });

  test('stands beside penalties of one λ each', () => {
    const text = withLambda('{count: 20}').replace('rounds:', '  - {kind: ridge, lambda: 0.1}\nrounds:');
    expect(parse(text).penalties.map(({ path }) => path?.count ?? null)).toEqual([20, null]);
  });

  const second = (lambda: string) =>
    withLambda('{count: 20}').replace('rounds:', `  - {kind: ridge, lambda: ${lambda}}\nrounds:`);
  test.each([
    ['one value', withLambda('{count: 1}'), 'field-value 13 penalty[0].lambda.count'],
    ['half a value', withLambda('{count: 2.5}'), 'field-value 13 penalty[0].lambda.count'],
    ['too many values', withLambda('{count: 1001}'), 'field-value 13 penalty[0].lambda.count'],
    ['a ratio of 0', withLambda('{ratio: 0}'), 'field-value 13 penalty[0].lambda.ratio'],
    ['a ratio of 1', withLambda('{ratio: 1}'), 'field-value 13 penalty[0].lambda.ratio'],
    ['a field it has not', withLambda('{count: 30, rato: 1e-3}'), 'field-unknown 13 penalty[0].lambda.rato'],
    ['another path', second('{count: 20}'), 'field-conflict 14 penalty[1].lambda'],
    ['a list', second('[1, 2]'), 'field-conflict 14 penalty[1].lambda'],
  ])('is refused with %s', (_, text, mark) => {
    expect(marks(failures(text))).toEqual([mark]);
  });

  test('is named where another penalty has one as well, whichever comes first', () => {
    const [failure] = failures(second('{count: 30}'));
    expect(failure).toMatchObject({
      message: 'Found a path beside the path of penalty[0]; allowed: one value.',
      remedy: 'Keep one path, and one value for every other penalty.',
    });
    const listFirst = withLambda('[1, 2]').replace('rounds:', '  - {kind: ridge, lambda: {}}\nrounds:');
    expect(marks(failures(listFirst))).toEqual(['field-conflict 13 penalty[0].lambda']);
  });
});

describe('a choice', () => {
  test('is by folds of a seeded hash, of a column, or by a criterion', () => {
    const choice = (written: string) => parse(twoFits(`choose: {${written}}`)).choose;
    expect(choice('folds: 5, seed: 7, rule: minimum')).toEqual({
      kind: 'folds',
      by: { kind: 'hash', folds: 5, seed: 7 },
      rule: 'minimum',
    });
    expect(choice('folds: 5')).toEqual({
      kind: 'folds',
      by: { kind: 'hash', folds: 5, seed: 1 },
      rule: 'one-standard-error',
    });
    expect(choice('folds: {column: year}')).toEqual({
      kind: 'folds',
      by: { kind: 'column', column: 'year' },
      rule: 'one-standard-error',
    });
    expect(choice('criterion: bic')).toEqual({ kind: 'criterion', criterion: 'bic' });
    expect(parse(twoFits()).choose).toBeNull();
  });

  test.each([
    ['nothing', twoFits('choose: {}'), 'field-missing 16 choose'],
    ['a word', twoFits('choose: folds'), 'field-type 16 choose'],
    ['a rule alone', twoFits('choose: {rule: minimum}'), 'field-missing 16 choose'],
    ['a slip', twoFits('choose: {fold: 5}'), 'field-missing 16 choose.folds field-unknown 16 choose.fold'],
    ['one fold', twoFits('choose: {folds: 1}'), 'field-value 16 choose.folds'],
    ['no folds', twoFits('choose: {folds: 0}'), 'field-value 16 choose.folds'],
    ['too many folds', twoFits('choose: {folds: 101}'), 'field-value 16 choose.folds'],
    ['folds by a word', twoFits('choose: {folds: year}'), 'field-type 16 choose.folds'],
    ['another rule', twoFits('choose: {folds: 5, rule: minimun}'), 'field-value 16 choose.rule'],
    ['a negative seed', twoFits('choose: {folds: 5, seed: -1}'), 'field-value 16 choose.seed'],
    ['a seed of 33 bits', twoFits('choose: {folds: 5, seed: 4294967296}'), 'field-value 16 choose.seed'],
    [
      'a seed with a column',
      twoFits('choose: {folds: {column: c}, seed: 1}'),
      'field-conflict 16 choose.seed',
    ],
    ['another criterion', twoFits('choose: {criterion: cp}'), 'field-value 16 choose.criterion'],
    ['both', twoFits('choose: {criterion: bic, folds: 5}'), 'field-conflict 16 choose.folds'],
    [
      'a rule with a criterion',
      twoFits('choose: {criterion: bic, rule: minimum}'),
      'field-conflict 16 choose.rule',
    ],
    [
      'the response as folds',
      twoFits('choose: {folds: {column: breaks}}'),
      'field-conflict 16 choose.folds.column',
    ],
    ['one λ', oneFit('choose: {folds: 5}'), 'field-conflict 16 choose'],
    ['one λ in a list', withLambda('[1]', ['choose: {criterion: aic}']), 'field-conflict 16 choose'],
    ['no penalty', unpenalised('choose: {folds: 5}'), 'field-conflict 16 choose'],
    [
      'more problems than one ask carries',
      withLambda('{count: 1000}', ['choose: {folds: 5}']),
      'field-conflict 16 choose.folds',
    ],
  ])('is refused with %s', (_, text, mark) => {
    expect(marks(failures(text)).join(' ')).toBe(mark);
  });

  test('without more than one λ says so, and what to do', () => {
    expect(failures(oneFit('choose: {folds: 5}'))[0]).toMatchObject({
      message: 'Found a choice with a single lambda; allowed: with two values of lambda or more.',
      remedy: 'Give a penalty a list of lambda or a path, such as {count: 30, ratio: 1e-3}.',
    });
    expect(failures(unpenalised('choose: {criterion: bic}'))[0]?.message).toContain('with no penalty;');
    expect(parse(withLambda('{count: 2}', ['choose: {folds: 2}'])).choose).not.toBeNull();
  });
});

describe('a report', () => {
  const report = (written: string) => parse(oneFit(`report: [${written}]`)).report;

  test('asks for what it lists; sandwiches and tests of terms need the covariance', () => {
    expect(parse(oneFit()).report).toEqual(NO_REPORT);
    expect(report('covariance, margins')).toEqual({ ...NO_REPORT, covariance: true, margins: true });
    expect(report('term-tests')).toEqual({ ...NO_REPORT, covariance: true, termTests: true });
    expect(report('sandwich')).toEqual({ ...NO_REPORT, covariance: true, sandwich: { cluster: null } });
    expect(report('sandwich: {cluster: zone}').sandwich).toEqual({ cluster: 'zone' });
    expect(report('compare-sites, fit-quality, debiased')).toEqual({
      ...NO_REPORT,
      compareSites: true,
      fitQuality: true,
      debiased: true,
    });
  });

  test('profiles coefficients in design order, a term standing for all of its own', () => {
    expect(report('profile: [material=steel, age_years]').profile).toEqual(['age_years', 'material=steel']);
    expect(report('profile: [material, material=steel]').profile).toEqual([
      'material=ductile-iron',
      'material=cast-iron',
      'material=steel',
    ]);
  });

  test.each([
    ['a word', oneFit('report: covariance'), 'field-type 16 report'],
    ['an unknown part', oneFit('report: [covarience]'), 'field-value 16 report[0]'],
    ['a part that is a list', oneFit('report: [[covariance]]'), 'field-type 16 report[0]'],
    ['an empty mapping', oneFit('report: [{}]'), 'field-type 16 report[0]'],
    [
      'an unknown mapping',
      oneFit('report: [{sandwitch: {cluster: c}}]'),
      'field-unknown 16 report[0].sandwitch',
    ],
    [
      'two parts in one',
      oneFit('report: [{sandwich: {cluster: c}, profile: [age_years]}]'),
      'field-unknown 16 report[0].profile',
    ],
    ['a part twice', oneFit('report: [margins, margins]'), 'field-value 16 report[1]'],
    [
      'a part twice in other words',
      oneFit('report: [sandwich, sandwich: {cluster: c}]'),
      'field-value 16 report[1]',
    ],
    [
      'a sandwich without its column',
      oneFit('report: [sandwich: {}]'),
      'field-missing 16 report[0].sandwich.cluster',
    ],
    ['a sandwich of nothing', oneFit('report: [sandwich: ]'), 'field-type 16 report[0].sandwich'],
    [
      'clusters by the response',
      oneFit('report: [sandwich: {cluster: breaks}]'),
      'field-conflict 16 report[0].sandwich.cluster',
    ],
    ['a profile of nothing', oneFit('report: [profile]'), 'field-missing 16 report[0]'],
    ['an empty profile', oneFit('report: [profile: []]'), 'field-value 16 report[0].profile'],
    [
      'a name twice',
      oneFit('report: [profile: [age_years, age_years]]'),
      'field-value 16 report[0].profile[1]',
    ],
    [
      'an unknown name',
      oneFit('report: [margins, profile: [age_years, age_yers]]'),
      'field-unknown 16 report[1].profile[1]',
    ],
    ['the baseline', oneFit('report: [profile: [material=pvc]]'), 'field-unknown 16 report[0].profile[0]'],
    ['de-biasing without a penalty', unpenalised('report: [debiased]'), 'field-conflict 16 report[0]'],
  ])('is refused with %s', (_, text, mark) => {
    expect(marks(failures(text))).toEqual([mark]);
  });

  test('is refused with the nearest name for a slip', () => {
    const remedy = (text: string) => failures(oneFit(text))[0]?.remedy;
    expect(remedy('report: [covarience]')).toBe('Did you mean "covariance"?');
    expect(remedy('report: [compare_sites]')).toBe('Did you mean "compare-sites"?');
    expect(remedy('report: [{sandwitch: {cluster: c}}]')).toBe('Did you mean "sandwich"?');
    expect(remedy('report: [sandwich: {clustr: c}]')).toBe('Add the field.');
    expect(remedy('report: [profile: [age_yers]]')).toBe('Did you mean "age_years"?');
    expect(remedy('choose: {criterion: bic, folds: 5}')).toBe('Choose by folds or by a criterion.');
  });

  test('profiles no more coefficients than a run can refit', () => {
    const levels = Array.from({ length: 102 }, (_, level) => `v${level}`).join(', ');
    const text = (names: string) =>
      breaksWith({ 9: `  - {column: zone, levels: [${levels}]}` }, [`report: [profile: [${names}]]`]);
    expect(marks(failures(text('zone')))).toEqual(['field-value 16 report[0].profile']);
    expect(parse(text('zone=v1, zone=v101')).report.profile).toHaveLength(2);
  });
});

describe('an intercept for each site', () => {
  test('is accepted', () => {
    expect(parse(oneFit('intercept: per-site')).intercept).toBe('per-site');
  });

  test('needs a term that the sites share', () => {
    const text = breaksWith({
      7: 'terms: []',
      8: '',
      9: '',
      10: '',
      11: '',
      12: 'intercept: per-site',
      13: '',
    });
    expect(marks(failures(text))).toEqual(['field-conflict 7 terms']);
    expect(failures(text)[0]?.message).toContain('a coefficient that sites share');
  });

  test('is no slip of another word', () => {
    const found = failures(oneFit('intercept: per_site'));
    expect(marks(found)).toEqual(['field-value 16 intercept']);
    expect(found[0]?.remedy).toBe('Did you mean "per-site"?');
  });
});

describe('the fits of a run, by which limits of a policy are multiplied', () => {
  const fits = (text: string) => fitCount(parse(text));

  test('are one for each λ', () => {
    expect(fits(unpenalised())).toBe(1);
    expect(fits(oneFit())).toBe(1);
    const lists = withLambda('[3, 2, 1]').replace('rounds:', '  - {kind: ridge, lambda: 1}\nrounds:');
    expect(fits(lists)).toBe(3);
    expect(fits(withLambda('{count: 20}'))).toBe(20);
    expect(lambdaCount(parse(withLambda('{count: 20}', ['choose: {folds: 5}'])))).toBe(20);
  });

  test('are made once more without each fold; folds of a column count as many as there may be', () => {
    expect(fits(withLambda('{count: 20}', ['choose: {folds: 5}']))).toBe(120);
    expect(fits(withLambda('{count: 20}', ['choose: {criterion: bic}']))).toBe(20);
    expect(fits(withLambda('{count: 20}', ['choose: {folds: {column: year}}']))).toBe(20 * 101);
  });

  test('are more where the report takes matrices or refits', () => {
    const report = (...parts: string[]) => fits(oneFit(`report: [${parts.join(', ')}]`)) - 1;
    expect(report('covariance', 'sandwich', 'margins')).toBe(1);
    // One for the matrices at the fit, and one for each of four terms.
    expect(report('term-tests')).toBe(1 + 4);
    expect(report('profile: [age_years, diameter_mm]')).toBe(1 + 2 * 12);
    // Four sites left out in turn, their own fits, and intercepts of their own.
    expect(report('compare-sites')).toBe(4 + 2);
  });

  test('are bounded where the sites are not named', () => {
    const text = breaksWith({ 3: 'sites: {least: 2}' }, ['report: [compare-sites]']);
    expect(fits(text)).toBe(1 + 100 + 2);
  });
});
