import { describe, expect, test } from 'vitest';
import { canonicalText, digestOf, readCanonical } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { BREAKS, breaksWith, parsedValue } from '../support/specifications.js';

const parse = (text: string) => parsedValue(parseFitSpecification(text, 'breaks.fit.yaml'));
const canonical = (text: string) => canonicalText(parse(text));
const base = canonical(BREAKS.join('\n'));

describe('the canonical form', () => {
  test('is one line of JSON with sorted keys and every default', () => {
    const small = canonical(
      'commonfit: 1\nsites: [a]\nresponse: {column: y}\nloss: squared\nterms: [{column: x}]',
    );
    expect(small).toBe(
      '{"barrier":{"deadline":"30000ms","missing":"stop","oldest":0,"patience":"1800000ms","quorum":"all"},' +
        '"commonfit":1,"intercept":"shared","loss":"squared","missing":"refuse","penalty":[],' +
        '"response":{"column":"y"},"rounds":{"most":300,"rung":"highest","tolerance":1e-8},"sites":["a"],' +
        '"terms":[{"column":"x","transform":"none"}],"title":""}',
    );
  });

  test.each([
    ['defaults written out', breaksWith({}, ['missing: refuse', 'intercept: shared', 'report: []'])],
    [
      'other layout, quotes and comments',
      `# pipes\n${breaksWith({ 2: '"title": \'Pipe breaks per kilometre-year\' # a' })}`,
    ],
    ['a duration in another unit', breaksWith({ 15: 'barrier: {deadline: 30000ms, patience: 30m}' })],
    ['a number written otherwise', breaksWith({ 14: 'rounds: {tolerance: 0.00000001, most: 300}' })],
    ['one lambda as a list', breaksWith({ 13: BREAKS[12]?.replace('0.01', '[0.01]') ?? '' })],
    [
      'a multiplier of 1',
      breaksWith({ 13: BREAKS[12]?.replace('age_years: 0', 'age_years: 0, material: 1') ?? '' }),
    ],
    [
      'the first level as baseline left out',
      breaksWith({ 10: BREAKS[9]?.replace(', baseline: pvc', '') ?? '' }),
    ],
  ])('is the same with %s', (_, text) => {
    expect(canonical(text)).toBe(base);
  });

  test.each([
    ['another title', breaksWith({ 2: 'title: Pipes' })],
    ['another order of sites', breaksWith({ 3: 'sites: [castlefen, harrowmere, lindell-bay, oakhythe]' })],
    ['another unit', breaksWith({ 8: '  - {column: age_years, unit: month}' })],
    ['another baseline', breaksWith({ 10: BREAKS[9]?.replace('baseline: pvc', 'baseline: steel') ?? '' })],
    ['no baseline', breaksWith({ 10: BREAKS[9]?.replace('baseline: pvc', 'baseline: null') ?? '' })],
    ['an offset for the exposure', breaksWith({ 6: 'offset: {column: km_years}' })],
    [
      'a penalty that is not scaled',
      breaksWith({ 13: BREAKS[12]?.replace('l1: 0.5', 'l1: 0.5, scaled: false') ?? '' }),
    ],
  ])('differs with %s', (_, text) => {
    expect(canonical(text)).not.toBe(base);
  });

  const path = (lambda: string, more: readonly string[] = []) =>
    canonical(breaksWith({ 13: `  - {kind: lasso, lambda: ${lambda}}` }, more));

  test('writes a path, a choice and a report with every default, and parts in one order', () => {
    const text = path('{count: 20}', ['choose: {folds: 3}', 'report: [fit-quality, sandwich]']);
    expect(text).toContain('"lambda":{"count":20,"ratio":0.001}');
    expect(text).toContain('"choose":{"folds":3,"rule":"one-standard-error","seed":1}');
    expect(text).toContain('"report":["covariance","sandwich","fit-quality"]');
    expect(path('{}')).toBe(path('{ratio: 0.001, count: 30}'));
    const choice = (written: string) => path('[1, 2]', [`choose: {${written}}`]);
    expect(choice('folds: 5')).toBe(choice('rule: one-standard-error, seed: 1, folds: 5'));
    expect(choice('folds: 5, seed: 2')).not.toBe(choice('folds: 5'));
    expect(choice('folds: {column: "5"}')).not.toBe(choice('folds: 5'));
  });

  test('is the same for reports that mean the same', () => {
    const report = (written: string) => canonical(breaksWith({}, [`report: [${written}]`]));
    expect(report('term-tests')).toBe(report('covariance, term-tests'));
    expect(report('margins, covariance')).toBe(report('covariance, margins'));
    expect(report('profile: [age_years, diameter_mm]')).toBe(report('profile: [diameter_mm, age_years]'));
    expect(report('profile: [material]')).toBe(
      report('profile: [material=steel, material=cast-iron, material=ductile-iron]'),
    );
    expect(report('sandwich: {cluster: zone}')).not.toBe(report('sandwich'));
  });

  test('of a specification without these parts has not changed', () => {
    expect(digestOf(base)).toBe('5666fab72cb24130a54b7629fde0b41969f9a00285e5d5187916f8a91ace77c1');
    expect(base).not.toMatch(/choose|report|path/);
  });

  test('has a SHA-256 digest', () => {
    // FIPS 180-4, the example "abc".
    expect(digestOf('abc')).toBe('ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad');
  });
});

describe('reading the canonical form', () => {
  test.each([
    ['the breaks', BREAKS.join('\n')],
    [
      'all that may be written',
      breaksWith(
        {
          3: 'sites: {least: 2}',
          4: 'response: {column: failed, positive: "yes"}',
          5: 'loss: logistic',
          6: 'offset: {column: x0}',
          9: '  - {column: age_years, transform: log}\n  - {column: age_years, transform: {power: 2}}',
          11: '  - {product: [age_years^2, material]}\n  - {product: [log(age_years), age_years, material]}',
          13: '  - {kind: lasso, lambda: [1, 0.1]}\n  - {kind: ridge, lambda: 3, per-term: {"10": 2, "9": 3}}',
        },
        ['weights: {column: w}', 'missing: drop'],
      ).replace('terms:', 'terms:\n  - {column: "10"}\n  - {column: "9"}'),
    ],
    [
      'a path, a choice by folds of a hash and a report',
      breaksWith(
        { 13: '  - {kind: lasso, lambda: {count: 30, ratio: 1e-3}}\n  - {kind: ridge, lambda: 0.1}' },
        [
          'choose: {folds: 5}',
          'intercept: per-site',
          'report: [fit-quality, {profile: [material]}, {sandwich: {cluster: zone}}, debiased, margins]',
        ],
      ),
    ],
    [
      'a choice by folds of a column',
      breaksWith({ 13: '  - {kind: lasso, lambda: [1, 0.1]}' }, [
        'choose: {folds: {column: year}, rule: minimum}',
      ]),
    ],
    [
      'a choice by a criterion',
      breaksWith({ 13: '  - {kind: lasso, lambda: [1, 0.1]}' }, ['choose: {criterion: extended-bic}']),
    ],
    ['a loss with a threshold', breaksWith({ 5: 'loss: {threshold: 1.50, kind: huber}' })],
  ])('gives back %s', (_, text) => {
    const specification = parse(text);
    expect(readCanonical(canonicalText(specification))).toEqual({ ok: true, value: specification });
  });

  test.each([
    ['text that is not JSON', '{', 'field-type'],
    ['another form of the same', `${base} `, 'field-value'],
    ['a default left out', base.replace('"missing":"refuse",', ''), 'field-value'],
    ['an unknown field', base.replace('"title"', '"titel"'), 'field-unknown'],
    [
      'a key the platform would hide',
      base.replace('"per-term":{', '"per-term":{"__proto__":0,'),
      'field-value',
    ],
    ['a value out of range', base.replace('"lambda":[0.01]', '"lambda":[-1]'), 'field-value'],
    ['no mapping', 'null', 'field-type'],
  ])('refuses %s', (_, text, code) => {
    expect(text).not.toBe(base);
    expect(readCanonical(text)).toMatchObject({ ok: false, failure: { code } });
  });
});
