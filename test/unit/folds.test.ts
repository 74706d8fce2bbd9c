import { describe, expect, test } from 'vitest';
import type { Choice } from '../../protocol/specification/types.js';
import { checkFolds } from '../../worker/custody/policy.js';
import { buildRawShard } from '../../worker/design/build.js';
import { rowHash } from '../../worker/design/folds.js';
import { surveyOf } from '../../worker/design/survey.js';
import { lossOf } from '../../worker/losses/index.js';
import { entriesOf } from '../support/dense.js';
import { numericTerm, specification, table } from '../support/designs.js';
import { failureOf, soundValue } from '../support/tables.js';
import { OPEN_POLICY } from '../support/worker-site.js';

const hashed = (folds: number, seed: number): Choice => ({
  kind: 'folds',
  by: { kind: 'hash', folds, seed },
  rule: 'minimum',
});
const byColumn: Choice = { kind: 'folds', by: { kind: 'column', column: 'fold' }, rule: 'minimum' };

/** The words of protocol/README.md with whole numbers of any size. */
function hashInWords(seed: bigint, row: bigint): bigint {
  const word = 1n << 32n;
  const mix = (at: bigint): bigint => {
    let h = at % word;
    h = ((h ^ (h >> 16n)) * 0x85ebca6bn) % word;
    h = ((h ^ (h >> 13n)) * 0xc2b2ae35n) % word;
    return h ^ (h >> 16n);
  };
  return mix(mix(mix(seed + 0x9e3779b9n)) + row * 0x9e3779b9n);
}

const counting = (rows: number) => Array.from({ length: rows }, (_, row) => row);

/** Row numbers of the source by fold, seen through the one column. */
function foldsOf(rows: readonly number[], choose: Choice, rowNumbers?: readonly number[]) {
  const spec = specification({ choose, terms: [numericTerm('a')] });
  const raw = soundValue(buildRawShard(spec, table({ y: rows, a: rows }, {}, rowNumbers)));
  const { labels, starts } = raw.folds ?? { labels: [], starts: [] };
  return Object.fromEntries(
    labels.map((label, k) => [label, [...entriesOf(raw).subarray(starts[k], starts[k + 1])]]),
  );
}

describe('folds by a seeded hash', () => {
  test('are those of the protocol', () => {
    const hash = rowHash(7);
    const folds = Array.from({ length: 10 }, (_, row) => 1 + Math.floor((hash(row) * 5) / 2 ** 32));
    expect(folds).toEqual([2, 4, 5, 1, 3, 4, 4, 2, 4, 5]);
    for (const seed of [0, 1, 7, 2 ** 31, 2 ** 32 - 1])
      for (const row of [0, 1, 2, 999, 2 ** 31, 2 ** 32 - 1])
        expect(rowHash(seed)(row)).toBe(Number(hashInWords(BigInt(seed), BigInt(row))));
  });

  test('come out even, and differently for another seed', () => {
    const rows = counting(10_000);
    const seven = foldsOf(rows, hashed(5, 7));
    expect(Object.keys(seven)).toEqual(['1', '2', '3', '4', '5']);
    // five standard deviations of a binomial count of 10,000 with 1/5
    for (const held of Object.values(seven)) expect(Math.abs(held.length - 2000)).toBeLessThan(200);
    const eight = foldsOf(rows, hashed(5, 8));
    const both = seven[1].filter((row) => eight[1].includes(row)).length;
    expect(Math.abs(both - 400)).toBeLessThan(100);
  });

  test('a row keeps its fold when other rows are dropped, or are in another shard', () => {
    const whole = foldsOf(counting(60), hashed(4, 3));
    const some = counting(60).filter((row) => row % 3 !== 1);
    const part = foldsOf(
      some,
      hashed(4, 3),
      some.map((row) => row + 1),
    );
    for (const [label, rows] of Object.entries(part))
      expect(rows).toEqual(whole[label].filter((row) => row % 3 !== 1));
  });

  test('stand side by side, each in table order', () => {
    const folds = foldsOf(counting(40), hashed(3, 1));
    for (const rows of Object.values(folds)) expect(rows).toEqual([...rows].sort((a, b) => a - b));
    expect(
      Object.values(folds)
        .flat()
        .sort((a, b) => a - b),
    ).toEqual(counting(40));
  });

  test('fewer rows than folds are refused', () => {
    const spec = specification({ choose: hashed(5, 1) });
    const failure = failureOf(buildRawShard(spec, table({ y: [1, 2, 3, 4] })));
    expect(failure.code).toBe('rows-too-few');
    expect(failure.message).toContain('4 rows');
    expect(failure.message).toContain('5 folds');
  });
});

describe('folds by a column', () => {
  const labelled = (values: readonly string[]) => {
    const levels = [...new Set(values)];
    const codes = Int32Array.from(values, (value) => levels.indexOf(value));
    const numbers = values.map((_, row) => row);
    return { ...table({ y: numbers, a: numbers }), labels: new Map([['fold', { levels, codes }]]) };
  };
  const spec = specification({ choose: byColumn, terms: [numericTerm('a')] });

  test('are its values, in order by code unit', () => {
    const raw = soundValue(buildRawShard(spec, labelled(['b', 'a', '10', 'b', '9'])));
    expect(raw.folds).toEqual({ labels: ['10', '9', 'a', 'b'], starts: [0, 1, 2, 3, 5] });
    expect(raw.y).toEqual(Float64Array.of(2, 4, 1, 0, 3));
  });

  test('one value at the site is remarked on', () => {
    const raw = soundValue(buildRawShard(spec, labelled(['north', 'north'])));
    expect(surveyOf(raw, lossOf({ kind: 'squared' })).notes).toContain('Every row is in fold north.');
  });

  test('too many values, or too long a one, are refused', () => {
    const many = failureOf(buildRawShard(spec, labelled(counting(101).map(String))));
    expect([many.code, many.where?.column]).toEqual(['field-value', 'fold']);
    const long = failureOf(buildRawShard(spec, labelled(['a', 'b'.repeat(201)])));
    expect(long.code).toBe('field-value');
  });

  test('a fold of fewer than five rows does not leave, unless the policy asks for fewer', () => {
    const raw = soundValue(buildRawShard(spec, labelled(['a', 'a', 'a', 'a', 'a', 'b', 'b', 'b', 'b'])));
    expect(checkFolds({ ...OPEN_POLICY, rowsLeast: 50 }, raw.folds)?.code).toBe('policy-rows');
    expect(checkFolds({ ...OPEN_POLICY, rowsLeast: 4 }, raw.folds)).toBeNull();
    expect(checkFolds({ ...OPEN_POLICY, rowsLeast: 50 }, null)).toBeNull();
  });
});

describe('the survey by fold', () => {
  test('is that of a table with these rows alone', () => {
    const rows = counting(50).map((row) => Math.sin(row) * 10 + 1e4);
    const base = { weights: { column: 'w' }, offset: { kind: 'offset', column: 'o' } as const };
    const spec = specification({ ...base, choose: hashed(3, 2), terms: [numericTerm('a')] });
    const columnsOf = (kept: readonly number[]) => ({
      y: kept.map((row) => rows[row] / 7),
      a: kept.map((row) => rows[row]),
      w: kept.map((row) => row % 4),
      o: kept.map((row) => row / 50),
    });
    const whole = soundValue(buildRawShard(spec, table(columnsOf(counting(50)))));
    const survey = surveyOf(whole, lossOf({ kind: 'squared' }));
    const order = foldsOf(counting(50), hashed(3, 2));
    for (const { fold, ...own } of survey.folds) {
      const alone = soundValue(
        buildRawShard(specification({ ...base, terms: [numericTerm('a')] }), table(columnsOf(order[fold]))),
      );
      expect(surveyOf(alone, lossOf({ kind: 'squared' }))).toMatchObject(own);
    }
    expect(survey.folds.map(({ fold }) => fold)).toEqual(['1', '2', '3']);
    expect(survey.folds.reduce((sum, { rowsUsed }) => sum + rowsUsed, 0)).toBe(50);
  });
});
