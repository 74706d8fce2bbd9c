import { describe, expect, test } from 'vitest';
import type { Work } from '../../protocol/messages/round.js';
import { designColumnNames, designColumns } from '../../protocol/specification/design-columns.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { Term } from '../../protocol/specification/types.js';
import { buildRawShard } from '../../worker/design/build.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import { RawSparseRows } from '../../worker/design/raw-sparse-rows.js';
import { checkMatrices } from '../../worker/service/matrix-size.js';
import { levelsTerm, numericTerm, specification, table } from '../support/designs.js';

const LEVELS = Array.from({ length: 30 }, (_, k) => `v${k}`);
/** A product of two columns of these is large enough to be told from others by its factors alone. */
const MANY = Array.from({ length: 120 }, (_, k) => `w${k}`);
const zone = levelsTerm('zone', LEVELS, 'v0');
const crew = levelsTerm('crew', LEVELS, 'v0');
const both: Term = { kind: 'product', factors: [zone, crew], name: 'zone:crew' };
const sloped: Term = {
  kind: 'product',
  factors: [zone, numericTerm('depth', 'log')],
  name: 'zone:log(depth)',
};
const codes = (...values: number[]) => ({ levels: LEVELS, codes: Int32Array.from(values) });
const rows = (depth: readonly number[]) =>
  table({ y: [1, 0, 1], depth }, { zone: codes(3, 0, 5), crew: codes(2, 1, 0) });

describe('which kind of rows a design has', () => {
  test.each<[string, readonly Term[], boolean]>([
    ['a product of many levels', [zone, crew, both], true],
    ['few columns', [zone, crew], false],
    ['numeric columns only', Array.from({ length: 300 }, () => numericTerm('depth')), false],
  ])('%s', (_, terms, sparse) => {
    const raw = buildRawShard(specification({ terms }), rows([1, 2, 3]));
    if (!raw.ok) throw new Error(raw.failure.message);
    expect(raw.value.rows).toBeInstanceOf(sparse ? RawSparseRows : RawDenseRows);
    const names = designColumns({ terms }).map(({ name }) => name);
    expect(raw.value.columns).toEqual(names);
    expect(designColumnNames({ terms })).toEqual(names);
  });
});

describe('a design by its entries refuses as one in full does', () => {
  const built = (depth: readonly number[], data = rows(depth)) =>
    buildRawShard(specification({ terms: [both, sloped] }), data);

  test('a transform that is not defined', () => {
    expect(built([1, 2, 0])).toMatchObject({
      ok: false,
      failure: { code: 'value-not-finite', where: { row: 3, column: 'depth' } },
    });
  });

  test('a value too large to square', () => {
    const terms: Term[] = [
      both,
      { kind: 'product', factors: [zone, numericTerm('depth')], name: 'zone:depth' },
    ];
    expect(buildRawShard(specification({ terms }), rows([1, 1e71, 1e72]))).toMatchObject({
      ok: false,
      failure: { code: 'value-not-finite', where: { row: 3, column: 'zone=v5:depth' } },
    });
  });

  test('a level that a term does not list', () => {
    const levels = [...LEVELS, 'v99'];
    const data = table(
      { y: [1, 0], depth: [1, 2] },
      { zone: { levels, codes: Int32Array.of(1, 30) }, crew: codes(1, 1) },
    );
    expect(built([], data)).toMatchObject({
      ok: false,
      failure: { code: 'level-unknown', where: { row: 2, column: 'zone' } },
    });
  });
});

describe('matrices of very many columns', () => {
  const point = new Float64Array(0);
  const evaluate = (want: 'gradient' | 'curvature'): Work => ({
    work: 'evaluate',
    problem: 0,
    part: null,
    points: [{ point, want }],
    ownFit: null,
    sketch: null,
  });

  test('are refused with a way on; everything else is answered', () => {
    expect(checkMatrices([evaluate('curvature')], 5001)).toMatchObject({ code: 'not-supported' });
    expect(checkMatrices([evaluate('curvature')], 5001)?.remedy).toContain('rounds.rung');
    expect(checkMatrices([evaluate('curvature')], 5000)).toBeNull();
    expect(checkMatrices([evaluate('gradient')], 1e6)).toBeNull();
    expect(checkMatrices([{ work: 'survey' }], null)).toBeNull();
  });
});

describe('a specification with products of very many levels', () => {
  const levels = (of: string) => `  - {column: ${of}, levels: [${MANY.join(', ')}], baseline: null}`;
  const text = (...products: readonly string[]) =>
    [
      'commonfit: 1',
      'title: Breaks by zones',
      'sites: [harrowmere]',
      'response: {column: y}',
      'loss: logistic',
      'terms:',
      ...['a', 'b', 'c'].map(levels),
      ...products.map((product) => `  - {product: [${product}]}`),
      '',
    ].join('\n');
  const failures = (...products: readonly string[]) => {
    const parsed = parseFitSpecification(text(...products), 'zones.fit.yaml');
    return parsed.ok ? [] : parsed.failures.map(({ code }) => code);
  };

  test('is sound where they differ', () => {
    expect(failures('a, b', 'b, c', 'a, c')).toEqual([]);
  });

  test('is refused where two have the same coefficients, in whatever order', () => {
    expect(failures('a, b', 'b, c', 'b, a')).toEqual(['field-conflict']);
    expect(failures('a, b', 'a, b')).toEqual(['field-conflict']);
  });
});
