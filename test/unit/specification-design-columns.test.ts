import { describe, expect, test } from 'vitest';
import {
  designColumnCount,
  designColumns,
  perTermMultipliers,
  usedColumns,
} from '../../protocol/specification/design-columns.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { BREAKS, breaksWith, parsedValue } from '../support/specifications.js';

const parse = (text: string) => parsedValue(parseFitSpecification(text, 'breaks.fit.yaml'));
const withTerms = (...terms: string[]) =>
  parse(
    [
      'commonfit: 1',
      'sites: [a]',
      'response: {column: y}',
      'loss: squared',
      'terms:',
      ...terms.map((term) => `  - ${term}`),
    ].join('\n'),
  );
const namesOf = (...terms: string[]) => designColumns(withTerms(...terms)).map((column) => column.name);

describe('coefficients are named', () => {
  test('by column, by level without the baseline, and by every combination of a product', () => {
    expect(designColumns(parse(BREAKS.join('\n'))).map((column) => column.name)).toEqual([
      'age_years',
      'diameter_mm',
      'material=ductile-iron',
      'material=cast-iron',
      'material=steel',
      'age_years:material=ductile-iron',
      'age_years:material=cast-iron',
      'age_years:material=steel',
    ]);
  });

  test('for every level where the baseline is null, in products as well', () => {
    expect(
      namesOf('{column: x}', '{column: m, levels: [a, b], baseline: null}', '{product: [m, x]}'),
    ).toEqual(['x', 'm=a', 'm=b', 'm=a:x', 'm=b:x']);
  });

  test('after the power of a column, the first power being the column itself', () => {
    expect(
      namesOf(
        '{column: d, transform: {power: 1}}',
        '{column: d, transform: {power: 2}}',
        '{column: d, transform: {power: -0.5}}',
      ),
    ).toEqual(['d', 'd^2', 'd^-0.5']);
  });

  test('after the column for a transform, after both where the column occurs again', () => {
    expect(namesOf('{column: d, transform: log}')).toEqual(['d']);
    expect(namesOf('{column: d, transform: log}', '{column: d, transform: {power: 2}}')).toEqual([
      'd',
      'd^2',
    ]);
    expect(namesOf('{column: d, transform: log}', '{column: d}', '{column: d, transform: sqrt}')).toEqual([
      'log(d)',
      'd',
      'sqrt(d)',
    ]);
  });
});

describe('products', () => {
  test('of a column with several terms use the first, and another by its name', () => {
    const terms = ['{column: d, transform: {power: 2}}', '{column: d, transform: log}', '{column: x}'];
    expect(namesOf(...terms, '{product: [x, d^2]}').at(-1)).toBe('x:d^2');
    const byColumn = designColumns(
      withTerms(
        '{column: d, transform: sqrt}',
        '{column: d, transform: log}',
        '{column: x}',
        '{product: [x, d]}',
      ),
    );
    expect(byColumn.at(-1)).toEqual({
      name: 'x:sqrt(d)',
      term: 3,
      factors: [
        { kind: 'numeric', column: 'x', transform: 'none' },
        { kind: 'numeric', column: 'd', transform: 'sqrt' },
      ],
    });
  });

  test('of three terms multiply all their choices, the last fastest', () => {
    const specification = withTerms(
      '{column: m, levels: [a, b, c]}',
      '{column: n, levels: [p, q, r]}',
      '{column: x}',
      '{product: [m, x, n]}',
    );
    const columns = designColumns(specification);
    expect(columns.slice(5).map((column) => column.name)).toEqual([
      'm=b:x:n=q',
      'm=b:x:n=r',
      'm=c:x:n=q',
      'm=c:x:n=r',
    ]);
    expect(designColumnCount(specification.terms)).toBe(columns.length);
  });
});

test('a product may be listed before its terms', () => {
  expect(namesOf('{product: [x, z]}', '{column: x}', '{column: z}')).toEqual(['x:z', 'x', 'z']);
});

test('used columns are given once for each role', () => {
  const text = breaksWith({ 9: '  - {column: age_years, transform: {power: 2}}' }, ['weights: {column: w}']);
  expect(usedColumns(parse(text))).toEqual([
    { column: 'breaks', role: 'response' },
    { column: 'km_years', role: 'exposure' },
    { column: 'w', role: 'weights' },
    { column: 'age_years', role: 'term' },
    { column: 'material', role: 'term' },
  ]);
});

test('columns that folds or clusters go by are used, beside any other role they have', () => {
  const text = breaksWith({ 13: '  - {kind: lasso, lambda: [1, 0.1]}' }, [
    'choose: {folds: {column: age_years}}',
    'report: [sandwich: {cluster: zone}]',
  ]);
  const used = usedColumns(parse(text));
  expect(used.slice(-2)).toEqual([
    { column: 'age_years', role: 'fold' },
    { column: 'zone', role: 'cluster' },
  ]);
  expect(used).toContainEqual({ column: 'age_years', role: 'term' });
});

test('a multiplier of a coefficient goes before that of its term; without either it is 1', () => {
  const specification = withTerms('{column: x}', '{column: m, levels: [a, b, c]}', '{column: constructor}');
  const columns = designColumns(specification);
  const perTerm = { m: 2, 'm=c': 0 };
  expect(perTermMultipliers({ perTerm }, specification.terms, columns)).toEqual([1, 2, 0, 1]);
});
