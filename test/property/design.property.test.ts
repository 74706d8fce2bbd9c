import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { LevelsTerm, NumericTerm, Term, Transform } from '../../protocol/specification/types.js';
import { buildRawShard } from '../../worker/design/build.js';
import { TransformedColumns } from '../../worker/design/factors.js';
import { RawSparseRows } from '../../worker/design/raw-sparse-rows.js';
import { sparseEntries } from '../../worker/design/sparse-build.js';
import { surveyOf } from '../../worker/design/survey.js';
import { lossOf } from '../../worker/losses/index.js';
import { entriesOf } from '../support/dense.js';
import { levelsTerm, numericTerm, specification, table } from '../support/designs.js';
import { soundValue } from '../support/tables.js';

interface Row {
  readonly a: number;
  readonly b: number;
  readonly m: string;
  readonly s: string;
}

const LEVELS = { m: ['pvc', 'steel', 'iron'], s: ['sand', 'clay'] } as const;
const rowArbitrary: fc.Arbitrary<Row> = fc.record({
  a: fc.double({ min: 0.01, max: 100, noNaN: true }),
  b: fc.double({ min: 0.5, max: 3, noNaN: true }),
  m: fc.constantFrom(...LEVELS.m),
  s: fc.constantFrom(...LEVELS.s),
});
const transformArbitrary: fc.Arbitrary<Transform> = fc.oneof(
  fc.constantFrom<Transform>('none', 'log', 'sqrt'),
  fc.constantFrom(-1, 2, 3).map((power) => ({ power })),
);
const plainTerm: fc.Arbitrary<NumericTerm | LevelsTerm> = fc.oneof(
  fc
    .tuple(fc.constantFrom('a', 'b'), transformArbitrary)
    .map(([column, transform]) => numericTerm(column, transform)),
  fc
    .constantFrom('m' as const, 's' as const)
    .chain((column) =>
      fc
        .constantFrom(null, ...LEVELS[column])
        .map((baseline) => levelsTerm(column, LEVELS[column], baseline)),
    ),
);
const termArbitrary: fc.Arbitrary<Term> = fc.oneof(
  plainTerm,
  fc
    .array(plainTerm, { minLength: 2, maxLength: 3 })
    .map((factors): Term => ({ kind: 'product', factors, name: 'p' })),
);

/** The naive twin: one row at a time, straight from the words of the specification. */
function rowOf(row: Row, terms: readonly Term[]): number[] {
  const single = (term: NumericTerm | LevelsTerm): number[] => {
    if (term.kind === 'levels')
      return term.levels
        .filter((level) => level !== term.baseline)
        .map((level) => (row[term.column as 'm' | 's'] === level ? 1 : 0));
    const value = row[term.column as 'a' | 'b'];
    if (term.transform === 'none') return [value];
    if (term.transform === 'log') return [Math.log(value)];
    if (term.transform === 'sqrt') return [Math.sqrt(value)];
    return [value ** term.transform.power];
  };
  return terms.flatMap((term) => {
    if (term.kind !== 'product') return single(term);
    return term.factors.map(single).reduce((left, right) => left.flatMap((l) => right.map((r) => l * r)));
  });
}

const tableOf = (rows: readonly Row[]) =>
  table(
    { y: rows.map((row) => row.a - row.b), a: rows.map((row) => row.a), b: rows.map((row) => row.b) },
    {
      m: { levels: LEVELS.m, codes: Int32Array.from(rows, (row) => LEVELS.m.indexOf(row.m as 'pvc')) },
      s: { levels: LEVELS.s, codes: Int32Array.from(rows, (row) => LEVELS.s.indexOf(row.s as 'sand')) },
    },
  );

const scenes = fc.record({
  rows: fc.array(rowArbitrary, { minLength: 1, maxLength: 40 }),
  // a block of the builder is 256 rows: some tables cross its edge
  times: fc.constantFrom(1, 1, 20),
  terms: fc.array(termArbitrary, { minLength: 1, maxLength: 4 }),
});

describe('the design', () => {
  test('is what a naive reading of the specification gives, row by row', () => {
    fc.assert(
      fc.property(scenes, ({ rows, times, terms }) => {
        const all = Array.from({ length: times }, () => rows).flat();
        const spec = specification({ terms });
        const raw = soundValue(buildRawShard(spec, tableOf(all)));
        const naive = all.flatMap((row) => rowOf(row, terms));
        expect(raw.columns).toEqual(designColumns(spec).map((column) => column.name));
        // 0 × −3 is −0 for the naive twin, which + 0 makes 0
        const wanted = Float64Array.from(naive, (value) => value + 0);
        expect(entriesOf(raw)).toEqual(wanted);
        const data = tableOf(all);
        const entries = sparseEntries(terms, new TransformedColumns(data), data);
        const full = new Float64Array(wanted.length);
        new RawSparseRows(entries, raw.columns.length).copy(0, all.length, full);
        expect(full).toEqual(wanted);
        expect(entries.starts[all.length]).toBeLessThanOrEqual(terms.length * all.length);
      }),
      { numRuns: 150 },
    );
  });

  test('has the moments of a naive two-pass sum, whatever the shift', () => {
    fc.assert(
      fc.property(
        fc.array(fc.integer({ min: -1000, max: 1000 }), { minLength: 1, maxLength: 60 }),
        fc.constantFrom(0, 1e6, -1e12),
        (values, shift) => {
          const spec = specification({ terms: [numericTerm('a')] });
          const data = table({ y: values, a: values.map((value) => value + shift) });
          const survey = surveyOf(soundValue(buildRawShard(spec, data)), lossOf({ kind: 'squared' }));
          // integers: n Σv² − (Σv)² is exact, and no shift changes it
          const n = values.length;
          const sum = values.reduce((total, value) => total + value, 0);
          const squares = values.reduce((total, value) => total + value * value, 0);
          const spread = (n * squares - sum * sum) / n;
          expect(Math.abs(survey.mean[0] - (shift + sum / n))).toBeLessThanOrEqual(
            4e-16 * Math.abs(shift) + 1e-12,
          );
          expect(Math.abs(survey.centredSquares[0] - spread)).toBeLessThanOrEqual(1e-12 * spread);
        },
      ),
      { numRuns: 200 },
    );
  });
});
