import { describe, expect, test } from 'vitest';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { BREAKS, breaksWith, parsedValue } from '../support/specifications.js';

const parse = (text: string) => parsedValue(parseFitSpecification(text, 'breaks.fit.yaml'));

describe('a fit specification', () => {
  test('gives the parsed form with every default filled in', () => {
    const parsed = parse(BREAKS.join('\n'));
    expect(parsed).toMatchObject({
      title: 'Pipe breaks per kilometre-year',
      sites: ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'],
      missing: 'refuse',
      response: { column: 'breaks', positive: null },
      loss: { kind: 'poisson' },
      offset: { kind: 'exposure', column: 'km_years' },
      weights: null,
      intercept: 'shared',
      rounds: { tolerance: 1e-8, most: 300, rung: 'highest' },
      barrier: { deadlineMs: 30_000, quorum: 'all', oldest: 0, patienceMs: 1_800_000, missing: 'stop' },
    });
    expect(parsed.penalties).toEqual([
      { kind: 'elastic-net', lambda: [0.01], path: null, l1: 0.5, scaled: true, perTerm: { age_years: 0 } },
    ]);
    expect(parsed.terms.map((term) => term.name)).toEqual([
      'age_years',
      'diameter_mm',
      'material',
      'age_years:material',
    ]);
  });

  test('needs no title, penalty, rounds, barrier or terms beside an intercept', () => {
    const parsed = parse(
      'commonfit: 1\nsites: {least: 3}\nresponse: {column: y}\nloss: squared\nterms: []\n',
    );
    expect(parsed).toMatchObject({ title: '', sites: { least: 3 }, terms: [], penalties: [], offset: null });
    expect(parsed.barrier.deadlineMs).toBe(30_000);
  });

  test.each([
    ['500ms', 500],
    ['30s', 30_000],
    ['5m', 300_000],
    ['2h', 7_200_000],
  ])('reads the duration %s as %d ms', (written, ms) => {
    expect(
      parse(breaksWith({ 15: `barrier: {deadline: ${written}, patience: ${written}}` })).barrier,
    ).toMatchObject({
      deadlineMs: ms,
      patienceMs: ms,
    });
  });

  test('takes `yes` for the text it is in YAML 1.2, and numbers as positive values by value', () => {
    const logistic = (positive: string) =>
      parse(breaksWith({ 4: `response: {column: failed, positive: ${positive}}`, 5: 'loss: logistic' }))
        .response.positive;
    expect(logistic('yes')).toBe('yes');
    expect(logistic('1.0')).toBe('1');
    expect(logistic('"01"')).toBe('01');
  });

  test("takes a plain loss by its name, and Huber's with its threshold", () => {
    expect(parse(breaksWith({ 5: 'loss: squared' })).loss).toEqual({ kind: 'squared' });
    expect(parse(breaksWith({ 5: 'loss: {kind: huber, threshold: 1.345}' })).loss).toEqual({
      kind: 'huber',
      threshold: 1.345,
    });
  });

  test('takes numbers in a list of levels as text, the first as the baseline', () => {
    const [term] = parse(
      breaksWith({ 8: '  - {column: zone, levels: [1, 2, 3.50]}', 11: '', 12: '', 13: '' }),
    ).terms;
    expect(term).toEqual({
      kind: 'levels',
      column: 'zone',
      levels: ['1', '2', '3.5'],
      baseline: '1',
      name: 'zone',
    });
  });

  test('keeps a coefficient for every level where the baseline is null', () => {
    const term = parse(breaksWith({ 10: '  - {column: material, levels: [pvc, steel], baseline: null}' }))
      .terms[2];
    expect(term).toMatchObject({ baseline: null });
  });

  test('takes an exposure with another loss as an offset of its logarithm', () => {
    expect(parse(breaksWith({ 5: 'loss: squared' })).offset).toEqual({
      kind: 'exposure',
      column: 'km_years',
    });
  });

  test('takes one lambda or a list, and penalties that add up', () => {
    const parsed = parse(
      breaksWith({}, []).replace(
        BREAKS[12] ?? '',
        '  - {kind: lasso, lambda: [1, 0.1]}\n  - {kind: ridge, lambda: 0, scaled: false}',
      ),
    );
    expect(parsed.penalties).toEqual([
      { kind: 'lasso', lambda: [1, 0.1], path: null, l1: 1, scaled: true, perTerm: {} },
      { kind: 'ridge', lambda: [0], path: null, l1: 0, scaled: false, perTerm: {} },
    ]);
  });

  test('lets per-term name a term, a coefficient or a product', () => {
    const perTerm =
      '{material: 2, material=steel: 3, "age_years:material": 0.5, "age_years:material=steel": 0}';
    const parsed = parse(breaksWith({ 13: `  - {kind: ridge, lambda: 1, per-term: ${perTerm}}` }));
    expect(parsed.penalties[0]?.perTerm).toEqual({
      material: 2,
      'material=steel': 3,
      'age_years:material': 0.5,
      'age_years:material=steel': 0,
    });
  });

  test('takes a quorum with the age that answers standing in may have, and going on without a site', () => {
    expect(
      parse(breaksWith({ 15: 'barrier: {quorum: 3, oldest: 40, missing: go-without}' })).barrier,
    ).toEqual({
      deadlineMs: 30_000,
      quorum: 3,
      oldest: 40,
      patienceMs: 1_800_000,
      missing: 'go-without',
    });
    expect(
      parse(breaksWith({ 3: 'sites: {least: 2}', 15: 'barrier: {quorum: 9, oldest: 1}' })).barrier,
    ).toMatchObject({ quorum: 9, oldest: 1 });
  });

  test('takes site names of both cases, and numbers', () => {
    expect(parse(breaksWith({ 3: 'sites: [North_Central, b.2, 7]' })).sites).toEqual([
      'North_Central',
      'b.2',
      '7',
    ]);
  });

  test('lets empty lists stand for parts that are not asked for', () => {
    expect(parse(breaksWith({}, ['report: []', 'constraints: []'])).title).toContain('Pipe breaks');
  });
});
