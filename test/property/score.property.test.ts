import { rmSync } from 'node:fs';
import { join } from 'node:path';
import fc from 'fast-check';
import { afterAll, describe, expect, test } from 'vitest';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import { buildRawShard } from '../../worker/design/build.js';
import { Predictor } from '../../worker/design/predictor.js';
import { lossOf } from '../../worker/losses/index.js';
import type { Table } from '../../worker/source/table.js';
import { entriesOf } from '../support/dense.js';
import { specification } from '../support/designs.js';
import { csvOf, type PipeRow, randomModel, randomRows } from '../support/random-model.js';
import { type Predicted, parquetOf, rowsOf, scoreFile } from '../support/score-bench.js';
import { newFolder, soundValue, writeText } from '../support/tables.js';

const folder = newFolder();
afterAll(() => rmSync(folder, { recursive: true, force: true }));

/** The worker's own design times the coefficients, and the size of the terms that rounding is measured against. */
function expected(model: ModelDocument, rows: readonly PipeRow[]): { eta: number; size: number }[] {
  const numericNames = ['age_years', 'diameter & mm', 'pressure_bar', 'km_years', 'shift'];
  const levelsOf = (column: string) => {
    const levels = [...new Set(rows.map((row) => String(row[column])))];
    return { levels, codes: Int32Array.from(rows, (row) => levels.indexOf(String(row[column]))) };
  };
  const table: Table = {
    rowCount: rows.length,
    rowsDropped: 0,
    numeric: new Map([
      ['breaks', new Float64Array(rows.length)] as const,
      ...numericNames.map((name) => [name, Float64Array.from(rows, (row) => Number(row[name]))] as const),
    ]),
    levels: new Map(['material', 'soil'].map((name) => [name, levelsOf(name)] as const)),
  };
  const spec = specification({
    terms: model.terms,
    offset: model.offset,
    response: model.response,
    loss: { kind: 'squared' },
  });
  const raw = soundValue(buildRawShard(spec, table));
  expect(raw.columns).toEqual(model.coefficients.map(({ name }) => name));
  return rows.map((_, row) => {
    const parts = model.coefficients.map(
      ({ value }, j) => entriesOf(raw)[row * raw.columns.length + j] * value,
    );
    const all = [...parts, model.intercept ?? 0, raw.offset?.[row] ?? 0];
    return {
      eta: all.reduce((sum, part) => sum + part, 0),
      size: all.reduce((sum, part) => sum + Math.abs(part), 0),
    };
  });
}

/** Two sums of n terms in different orders differ by less than n ulp of the sum of sizes. */
function expectSame(model: ModelDocument, rows: readonly PipeRow[], found: readonly number[]): void {
  const terms = model.coefficients.length + 2;
  const wrong = expected(model, rows).filter(
    ({ eta, size }, at) => !(Math.abs(found[at] - eta) <= terms * Number.EPSILON * size),
  );
  expect(wrong).toEqual([]);
}

function expectPredicted(
  model: ModelDocument,
  rows: readonly PipeRow[],
  predicted: readonly Predicted[],
): void {
  const found = predicted.map((row) => Number(row.linear_predictor));
  expectSame(model, rows, found);
  const { mean } = lossOf(model.loss === 'huber' ? { kind: 'huber', threshold: 1 } : { kind: model.loss });
  expect(predicted.map((row) => row.prediction)).toEqual(found.map(mean));
  expect(predicted.map((row) => row.pipe)).toEqual(rows.map((row) => row.pipe));
}

describe('score', () => {
  test('is the worker’s own linear predictor to rounding, row by row', () => {
    fc.assert(
      fc.property(fc.nat(), fc.integer({ min: 1, max: 40 }), (seed, count) => {
        const model = randomModel(seed);
        const rows = randomRows(seed + 1, count);
        const predictor = new Predictor(model);
        const values = predictor.inputs.map(({ column, levels }) =>
          Float64Array.from(rows, (row) =>
            levels === null ? Number(row[column]) : levels.indexOf(String(row[column])),
          ),
        );
        expectSame(model, rows, [...predictor.predict(values, rows.length)]);
      }),
      { numRuns: 300 },
    );
  });

  test('of a table keeps rows, columns and their order', async () => {
    for (const seed of [11, 12]) {
      const model = randomModel(seed);
      const rows = randomRows(seed, 3000);
      const csv = writeText(folder, 'table.csv', csvOf(rows));
      soundValue(await scoreFile(model, csv, folder));
      expectPredicted(model, rows, await rowsOf(join(folder, 'out.parquet')));
    }
  });

  test('gives the same bits from CSV, Parquet and JSON lines, into each of them', async () => {
    const model = randomModel(3);
    const rows = randomRows(4, 500);
    const csv = writeText(folder, 'same.csv', csvOf(rows));
    const parquet = await parquetOf(csv, join(folder, 'same.parquet'));
    const lines = rows.map((row) => `${JSON.stringify(row)}\n`).join('');
    const jsonl = writeText(folder, 'same.jsonl', lines);
    for (const table of [csv, parquet, jsonl]) {
      for (const to of ['csv', 'parquet', 'jsonl'] as const) {
        expect(soundValue(await scoreFile(model, table, folder, { to })).rows).toBe(rows.length);
        expectPredicted(model, rows, await rowsOf(join(folder, `out.${to}`)));
      }
    }
  });
});
