import { describe, expect, test } from 'vitest';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { breaksWith, failuresOf, marks } from '../support/specifications.js';

const failures = (text: string) => failuresOf(parseFitSpecification(text, 'breaks.fit.yaml'));

/** What is wrong, the document, and `code line field` of the one failure. */
const cases: [string, string, string][] = [
  ['no version', breaksWith({ 1: '' }), 'field-missing 2 commonfit'],
  ['another version', breaksWith({ 1: 'commonfit: 2' }), 'field-value 1 commonfit'],
  ['a field with a slip in it', breaksWith({ 12: 'penlty:' }), 'field-unknown 12 penlty'],
  [
    'an unknown field deep inside',
    breaksWith({ 15: 'barrier: {dedline: 30s}' }),
    'field-unknown 15 barrier.dedline',
  ],
  ['a title that is a number', breaksWith({ 2: 'title: 3' }), 'field-type 2 title'],
  ['a field left empty', breaksWith({ 2: 'title:' }), 'field-type 2 title'],
  ['sites that are one word', breaksWith({ 3: 'sites: harrowmere' }), 'field-type 3 sites'],
  ['no sites', breaksWith({ 3: 'sites: []' }), 'field-value 3 sites'],
  ['a site twice', breaksWith({ 3: 'sites: [a, b, a]' }), 'field-value 3 sites[2]'],
  ['a site name with a slash', breaksWith({ 3: 'sites: [a, ../b]' }), 'field-value 3 sites[1]'],
  ['a site name of 65 characters', breaksWith({ 3: `sites: [${'a'.repeat(65)}]` }), 'field-value 3 sites[0]'],
  ['no site at least', breaksWith({ 3: 'sites: {least: 0}' }), 'field-value 3 sites.least'],
  ['no response', breaksWith({ 4: '' }), 'field-missing 1 response'],
  ['a response without a column', breaksWith({ 4: 'response: {}' }), 'field-missing 4 response.column'],
  [
    'a positive value without the logistic loss',
    breaksWith({ 4: 'response: {column: breaks, positive: 1}' }),
    'field-conflict 4 response.positive',
  ],
  ['a loss nobody knows', breaksWith({ 5: 'loss: poison' }), 'field-value 5 loss'],
  ['huber without a threshold', breaksWith({ 5: 'loss: huber' }), 'field-missing 5 loss'],
  ['a huber mapping without one', breaksWith({ 5: 'loss: {kind: huber}' }), 'field-missing 5 loss.threshold'],
  [
    'a threshold of 0',
    breaksWith({ 5: 'loss: {kind: huber, threshold: 0}' }),
    'field-value 5 loss.threshold',
  ],
  [
    'a threshold without end',
    breaksWith({ 5: 'loss: {kind: huber, threshold: .inf}' }),
    'field-value 5 loss.threshold',
  ],
  [
    'a threshold in words',
    breaksWith({ 5: 'loss: {kind: huber, threshold: two}' }),
    'field-type 5 loss.threshold',
  ],
  [
    'a field that huber has not',
    breaksWith({ 5: 'loss: {kind: huber, threshold: 2, tau: 1}' }),
    'field-unknown 5 loss.tau',
  ],
  [
    'a threshold for least squares',
    breaksWith({ 5: 'loss: {kind: squared, threshold: 2}' }),
    'field-type 5 loss',
  ],
  ['exposure and offset', breaksWith({}, ['offset: {column: x}']), 'field-conflict 16 offset'],
  [
    'the response as a weight',
    breaksWith({}, ['weights: {column: breaks}']),
    'field-conflict 16 weights.column',
  ],
  ['a term that is a list', breaksWith({ 9: '  - [diameter_mm]' }), 'field-type 9 terms[1]'],
  ['the response as a term', breaksWith({ 9: '  - {column: breaks}' }), 'field-conflict 9 terms[1].column'],
  [
    'the exposure with levels',
    breaksWith({ 9: '  - {column: km_years, levels: [a, b]}' }),
    'field-conflict 9 terms[1].column',
  ],
  [
    'terms that are no list',
    breaksWith({ 7: 'terms: 5', 8: '', 9: '', 10: '', 11: '' }),
    'field-type 7 terms',
  ],
  [
    'neither terms nor intercept',
    breaksWith({ 7: 'terms: []', 8: '', 9: '', 10: '', 11: '', 12: 'intercept: none', 13: '' }),
    'field-conflict 7 terms',
  ],
  [
    'an unknown transform',
    breaksWith({ 9: '  - {column: d, transform: lgo}' }),
    'field-value 9 terms[1].transform',
  ],
  [
    'the power 0',
    breaksWith({ 9: '  - {column: d, transform: {power: 0}}' }),
    'field-value 9 terms[1].transform.power',
  ],
  [
    'a transform beside levels',
    breaksWith({ 9: '  - {column: d, transform: log, levels: [a, b]}' }),
    'field-conflict 9 terms[1].transform',
  ],
  [
    'a baseline without levels',
    breaksWith({ 9: '  - {column: d, baseline: a}' }),
    'field-conflict 9 terms[1].baseline',
  ],
  [
    'a baseline that is no level',
    breaksWith({ 9: '  - {column: d, levels: [a, b], baseline: c}' }),
    'field-value 9 terms[1].baseline',
  ],
  ['a single level', breaksWith({ 9: '  - {column: d, levels: [a]}' }), 'field-value 9 terms[1].levels'],
  [
    'a level twice, as number and as text',
    breaksWith({ 9: '  - {column: d, levels: [1, "1"]}' }),
    'field-value 9 terms[1].levels[1]',
  ],
  [
    'a level too large to be exact',
    breaksWith({ 9: '  - {column: d, levels: [a, 9007199254740993]}' }),
    'field-value 9 terms[1].levels[1]',
  ],
  ['the same term twice', breaksWith({ 9: '  - {column: age_years}' }), 'field-conflict 9 terms[1]'],
  [
    'a product turned round',
    breaksWith({}).replace('penalty:', '  - {product: [material, age_years]}\npenalty:'),
    'field-conflict 12 terms[4]',
  ],
  [
    'a product of one column',
    breaksWith({ 11: '  - {product: [material]}' }),
    'field-value 11 terms[3].product',
  ],
  [
    'a product of a column with itself',
    breaksWith({ 11: '  - {product: [material, material]}' }),
    'field-value 11 terms[3].product[1]',
  ],
  [
    'a product of a column not listed',
    breaksWith({ 11: '  - {product: [material, depth_m]}' }),
    'field-value 11 terms[3].product[1]',
  ],
  [
    'an unknown kind of penalty',
    breaksWith({ 13: '  - {kind: laso, lambda: 1}' }),
    'field-value 13 penalty[0].kind',
  ],
  ['a penalty without lambda', breaksWith({ 13: '  - {kind: lasso}' }), 'field-missing 13 penalty[0].lambda'],
  [
    'a negative lambda',
    breaksWith({ 13: '  - {kind: lasso, lambda: -1}' }),
    'field-value 13 penalty[0].lambda',
  ],
  [
    'an infinite lambda',
    breaksWith({ 13: '  - {kind: lasso, lambda: .inf}' }),
    'field-value 13 penalty[0].lambda',
  ],
  [
    'a negative lambda in a list',
    breaksWith({ 13: '  - {kind: lasso, lambda: [1, -0.1]}' }),
    'field-value 13 penalty[0].lambda[1]',
  ],
  [
    'lambda in quotes',
    breaksWith({ 13: '  - {kind: lasso, lambda: "1"}' }),
    'field-type 13 penalty[0].lambda',
  ],
  [
    'an elastic net without l1',
    breaksWith({ 13: '  - {kind: elastic-net, lambda: 1}' }),
    'field-missing 13 penalty[0].l1',
  ],
  [
    'l1 above 1',
    breaksWith({ 13: '  - {kind: elastic-net, lambda: 1, l1: 1.5}' }),
    'field-value 13 penalty[0].l1',
  ],
  [
    'l1 with a lasso',
    breaksWith({ 13: '  - {kind: lasso, lambda: 1, l1: 1}' }),
    'field-conflict 13 penalty[0].l1',
  ],
  [
    'lists of lambda of different lengths',
    breaksWith({ 13: '  - {kind: lasso, lambda: [1, 2, 3]}\n  - {kind: ridge, lambda: [1, 2]}' }),
    'field-conflict 14 penalty[1].lambda',
  ],
  [
    'per-term with an unknown name',
    breaksWith({ 13: '  - {kind: lasso, lambda: 1, per-term: {age_year: 0}}' }),
    'field-unknown 13 penalty[0].per-term.age_year',
  ],
  [
    'per-term with a negative multiplier',
    breaksWith({ 13: '  - {kind: lasso, lambda: 1, per-term: {age_years: -1}}' }),
    'field-value 13 penalty[0].per-term.age_years',
  ],
  ['a tolerance of 0', breaksWith({ 14: 'rounds: {tolerance: 0}' }), 'field-value 14 rounds.tolerance'],
  ['half a round', breaksWith({ 14: 'rounds: {most: 2.5}' }), 'field-value 14 rounds.most'],
  ['an unknown rung', breaksWith({ 14: 'rounds: {rung: hihgest}' }), 'field-value 14 rounds.rung'],
  [
    'a duration without its unit',
    breaksWith({ 15: 'barrier: {deadline: 30}' }),
    'field-type 15 barrier.deadline',
  ],
  ['a duration in weeks', breaksWith({ 15: 'barrier: {deadline: 3w}' }), 'field-value 15 barrier.deadline'],
  ['a duration of nothing', breaksWith({ 15: 'barrier: {patience: 0s}' }), 'field-value 15 barrier.patience'],
  ['a field written twice', breaksWith({}, ['loss: squared']), 'field-conflict 16 loss'],
  ['a list as the name of a field', breaksWith({}, ['? [a, b]', ': 1']), 'field-type 16 -'],
];

describe('a fit specification is refused', () => {
  test.each(cases)('for %s', (_, text, mark) => {
    const found = failures(text);
    expect(marks(found)).toEqual([mark]);
    expect(found[0]?.where?.file).toBe('breaks.fit.yaml');
    expect(found[0]?.message).toMatch(/^[A-Z].*\.$/);
  });

  test.each([
    ['group penalties', breaksWith({ 13: '  - {kind: group-lasso, lambda: 1}' }), '13 penalty[0].kind'],
    ['groups', breaksWith({ 13: '  - {kind: lasso, lambda: 1, groups: [[a, b]]}' }), '13 penalty[0].groups'],
    ['total variation', breaksWith({ 13: '  - {kind: total-variation, lambda: 1}' }), '13 penalty[0].kind'],
    ['nuclear norms', breaksWith({ 13: '  - {kind: nuclear-norm, lambda: 1}' }), '13 penalty[0].kind'],
    ['splines', breaksWith({ 9: '  - {spline: pressure_bar, knots: [3, 5, 7]}' }), '9 terms[1]'],
    ['constraints', breaksWith({}, ['constraints:', '  - {term: age_years, least: 0}']), '16 constraints'],
    ['multinomial losses', breaksWith({ 5: 'loss: multinomial' }), '5 loss'],
    ['cox losses', breaksWith({ 5: 'loss: cox' }), '5 loss'],
    ['gamma losses', breaksWith({ 5: 'loss: gamma' }), '5 loss'],
    ['hinge losses', breaksWith({ 5: 'loss: hinge' }), '5 loss'],
    ['quantile losses', breaksWith({ 5: 'loss: {kind: quantile, tau: 0.9}' }), '5 loss'],
    ['event times', breaksWith({ 4: 'response: {time: t, event: e}' }), '4 response'],
    ['classes', breaksWith({ 4: 'response: {column: kind, classes: [a, b]}' }), '4 response.classes'],
  ])('as not supported, and not as unknown, for %s', (_, text, place) => {
    const found = failures(text);
    expect(marks(found)).toEqual([`not-supported ${place}`]);
    expect(found[0]?.message).toMatch(/ are part of the format, but this version cannot do them yet\.$/);
  });

  test('a quorum needs answers that may stand in, and sites enough; without one no answer may be old', () => {
    const barrier = (text: string) => failures(breaksWith({ 15: `barrier: {${text}}` }));
    expect(marks(barrier('quorum: 3'))).toEqual(['field-conflict 15 barrier.oldest']);
    expect(barrier('quorum: 3')[0]?.remedy).toBe('Set it, for instance to 40, or use quorum: all.');
    expect(marks(barrier('oldest: 2'))).toEqual(['field-conflict 15 barrier.oldest']);
    expect(marks(barrier('quorum: all, oldest: 2'))).toEqual(['field-conflict 15 barrier.oldest']);
    expect(marks(barrier('quorum: 5, oldest: 2'))).toEqual(['field-conflict 15 barrier.quorum']);
    expect(marks(barrier('quorum: 0, oldest: 2'))).toEqual(['field-value 15 barrier.quorum']);
    expect(marks(barrier('quorum: 2.5, oldest: 2'))).toEqual(['field-value 15 barrier.quorum']);
    expect(marks(barrier('quorum: most, oldest: 2'))).toEqual(['field-value 15 barrier.quorum']);
    expect(marks(barrier('quorum: 3, oldest: -1'))).toEqual(['field-value 15 barrier.oldest']);
    expect(marks(barrier('missing: go_without'))).toEqual(['field-value 15 barrier.missing']);
  });

  test('with the nearest known name for a slip', () => {
    const remedy = (text: string) => failures(text)[0]?.remedy;
    expect(remedy(breaksWith({ 12: 'penlty:' }))).toBe('Did you mean "penalty"?');
    expect(remedy(breaksWith({ 15: 'barrier: {dedline: 30s}' }))).toBe('Did you mean "deadline"?');
    expect(remedy(breaksWith({ 13: '  - {kind: lasso, lambda: 1, per_term: {age_years: 0}}' }))).toBe(
      'Did you mean "per-term"?',
    );
    expect(remedy(breaksWith({ 13: '  - {kind: lasso, lambda: 1, per-term: {age_year: 0}}' }))).toBe(
      'Did you mean "age_years"?',
    );
    expect(remedy(breaksWith({ 5: 'loss: poison' }))).toBe('Did you mean "poisson"?');
    expect(remedy(breaksWith({ 12: 'zzzzzz:' }))).toBe('Remove it.');
  });

  test('with what was found and what is allowed', () => {
    const [failure] = failures(breaksWith({ 13: '  - {kind: lasso, lambda: -1}' }));
    expect(failure?.message).toBe(
      'Found -1; allowed: a number of 0 or more, a list of 1 to 1000 of them, or a path {count: …, ratio: …}.',
    );
  });

  test('with every failure, those of one field and those between fields', () => {
    const text = breaksWith(
      {
        3: 'sites: [a, a]',
        5: 'loss: poison',
        13: '  - {kind: laso, lambda: -1}',
        15: 'barrier: {deadline: 3w, most: 1}',
      },
      ['offset: {column: x}', 'sead: 7', 'title: again'],
    );
    expect(marks(failures(text)).sort()).toEqual([
      'field-conflict 16 offset',
      'field-conflict 18 title',
      'field-unknown 15 barrier.most',
      'field-unknown 17 sead',
      'field-value 13 penalty[0].kind',
      'field-value 13 penalty[0].lambda',
      'field-value 15 barrier.deadline',
      'field-value 3 sites[1]',
      'field-value 5 loss',
    ]);
  });

  test('for more coefficients than the wire carries, without making them', () => {
    const columns = ['a', 'b', 'c', 'd'];
    const levels = Array.from({ length: 1000 }, (_, level) => `v${level}`).join(', ');
    const terms = columns.map((column) => `  - {column: ${column}, levels: [${levels}]}`);
    const head = 'commonfit: 1\nsites: [s]\nresponse: {column: y}\nloss: squared\nterms:\n';
    expect(marks(failures(`${head}${terms.join('\n')}\n  - {product: [a, b, c, d]}`))).toEqual([
      'field-value 5 terms',
    ]);
  });
});

describe('text that is not YAML is refused', () => {
  test.each([
    ['a bracket left open', breaksWith({ 3: 'sites: [a, b' }), 4],
    ['a tab as indentation', breaksWith({ 8: '\t- {column: a}' }), 8],
    ['a reference to nothing', breaksWith({ 2: 'title: *nowhere' }), 2],
    ['an unknown tag', breaksWith({ 2: 'title: !vault x' }), 2],
  ])('for %s, with its line', (_, text, line) => {
    const [first] = failures(text);
    expect(first).toMatchObject({ code: 'yaml-invalid', where: { file: 'breaks.fit.yaml', line } });
  });

  test('for YAML 1.1, where yes is no text', () => {
    expect(failures(`%YAML 1.1\n---\n${breaksWith({})}`)[0]?.code).toBe('yaml-invalid');
  });

  test('for two documents in one file', () => {
    expect(failures(`${breaksWith({})}\n---\n${breaksWith({})}`)[0]?.code).toBe('yaml-invalid');
  });

  test('for an empty file, as a mapping that is missing', () => {
    expect(failures('')[0]).toMatchObject({ code: 'field-type', where: { line: 1 } });
  });

  test('for references that expand without bound', () => {
    const levels = Array.from(
      { length: 9 },
      (_, i) => `k${i + 1}: &k${i + 1} [${Array(9).fill(`*k${i}`).join(', ')}]`,
    );
    expect(failures(['k0: &k0 [x]', ...levels].join('\n'))[0]?.code).toBe('yaml-invalid');
  });

  test('for nesting that would exhaust the stack', () => {
    expect(failures(`title: ${'['.repeat(20_000)}`)[0]?.code).toBe('yaml-invalid');
  });

  test('for a file too large to be one', () => {
    expect(failures(`# ${'x'.repeat(1_000_001)}`)[0]?.code).toBe('yaml-invalid');
  });
});
