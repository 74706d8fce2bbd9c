import { existsSync, readdirSync, readFileSync, rmSync } from 'node:fs';
import { join } from 'node:path';
import { afterAll, describe, expect, test } from 'vitest';
import { levelsTerm, numericTerm } from '../support/designs.js';
import { modelDocument } from '../support/random-model.js';
import { rowsOf, scoreFile } from '../support/score-bench.js';
import { failureOf, newFolder, soundValue, writeText } from '../support/tables.js';

const folder = newFolder();
afterAll(() => rmSync(folder, { recursive: true, force: true }));

const age = { ...numericTerm('age_years'), unit: 'year' };
const diameter = { ...numericTerm('diameter_mm', 'log'), unit: 'mm' };
const material = levelsTerm('material', ['pvc', 'steel', 'lead'], 'pvc');
const model = modelDocument({
  loss: 'poisson',
  offset: { kind: 'exposure', column: 'km_years' },
  intercept: -1,
  terms: [age, diameter, material],
  coefficients: [
    { name: 'age_years', value: 0.02 },
    { name: 'diameter_mm', value: -0.5 },
    { name: 'material=steel', value: 0.25 },
  ],
  dropped: ['material=lead'],
});
const HEAD = 'pipe,age_years,diameter_mm,material,km_years';
const GOOD = 'P1,10,100,steel,2';
const table = (name: string, ...rows: string[]) => writeText(folder, name, `${[HEAD, ...rows].join('\n')}\n`);

describe('a row that can be scored', () => {
  test('has the expected count over its exposure', async () => {
    soundValue(await scoreFile(model, table('good.csv', GOOD), folder, { columns: ['pipe'], to: 'csv' }));
    const [row] = await rowsOf(join(folder, 'out.csv'));
    const eta = -1 + 0.02 * 10 - 0.5 * Math.log(100) + 0.25 + Math.log(2);
    expect(Object.keys(row)).toEqual(['pipe', 'prediction', 'linear_predictor']);
    expect(row.linear_predictor).toBeCloseTo(eta, 14);
    expect(row.prediction).toBeCloseTo(Math.exp(eta), 14);
  });

  test('needs no column that only coefficients of 0 multiply', async () => {
    const sparse = modelDocument({
      terms: [age, material],
      coefficients: [
        { name: 'age_years', value: 2 },
        { name: 'material=steel', value: 0 },
        { name: 'material=lead', value: 0 },
      ],
    });
    const file = writeText(folder, 'sparse.jsonl', '{"age_years": 3}\n');
    soundValue(await scoreFile(sparse, file, folder, { to: 'jsonl' }));
    expect(readFileSync(join(folder, 'out.jsonl'), 'utf8')).toBe(
      '{"age_years":3,"prediction":6.5,"linear_predictor":6.5}\n',
    );
  });

  test('of a model with an intercept alone has the intercept', async () => {
    const flat = modelDocument({ intercept: 3, terms: [], coefficients: [] });
    soundValue(await scoreFile(flat, table('flat.csv', GOOD, GOOD), folder, { columns: ['pipe'] }));
    expect((await rowsOf(join(folder, 'out.parquet'))).map((row) => row.prediction)).toEqual([3, 3]);
  });
});

const unfit = [
  ['a missing value', 'P2,,100,pvc,1', 'value-missing', 'age_years', 'is missing'],
  ['text for a number', 'P2,old,100,pvc,1', 'column-not-numeric', 'age_years', '"old" is not a number'],
  ['an infinite number', 'P2,inf,100,pvc,1', 'value-not-finite', 'age_years', 'inf is not finite'],
  ['a level of another model', 'P2,10,100,copper,1', 'level-unknown', 'material', '"copper" is no level'],
  ['a level no row of the fit had', 'P2,10,100,lead,1', 'level-unknown', 'material', 'No row of the fit had'],
  ['a missing level', 'P2,10,100,,1', 'value-missing', 'material', 'is missing'],
  ['a transform that is not defined', 'P2,10,0,pvc,1', 'value-not-finite', 'diameter_mm', 'transform log'],
  ['an exposure of 0', 'P2,10,100,pvc,0', 'exposure-not-positive', 'km_years', 'not above zero'],
  [
    'a predictor whose exponential is beyond reach',
    'P2,1e9,100,pvc,1',
    'value-not-finite',
    null,
    'too large',
  ],
] as const;

describe('a row that cannot be scored', () => {
  test.each(unfit)(
    '%s ends the work, naming file, row, column and value',
    async (_, row, code, column, words) => {
      const file = table('unfit.csv', GOOD, row, GOOD);
      const failure = failureOf(await scoreFile(model, file, folder));
      expect(failure.code).toBe(code);
      expect(failure.where).toEqual({ file, row: 2, ...(column === null ? {} : { column }) });
      expect(failure.message).toContain(words);
      expect(failure.remedy).toContain('--flag-rows');
    },
  );

  test('the first of several is named, however the table is cut into chunks', async () => {
    const rows = Array.from({ length: 9000 }, (_, at) => (at === 4321 || at === 8000 ? 'P,,1,pvc,1' : GOOD));
    const failure = failureOf(await scoreFile(model, table('long.csv', ...rows), folder));
    expect(failure.where?.row).toBe(4322);
  });

  test('flagged rows keep their place, without a prediction and with the reason', async () => {
    const file = table('flagged.csv', GOOD, ...unfit.map(([, row]) => row), GOOD);
    const scored = soundValue(await scoreFile(model, file, folder, { flagRows: true }));
    expect(scored).toMatchObject({ rows: unfit.length + 2, flagged: unfit.length });
    const rows = await rowsOf(join(folder, 'out.parquet'));
    expect(rows[0].note).toBeNull();
    expect(rows[0].prediction).toBe(rows[unfit.length + 1].prediction);
    unfit.forEach(([, , , column, words], at) => {
      const { prediction, linear_predictor, note } = rows[at + 1];
      expect([prediction, linear_predictor]).toEqual([null, null]);
      expect(note).toContain(words);
      if (column !== null) expect(note).toContain(`${column}: `);
    });
  });

  test('levels that no row of the fit had together', async () => {
    const soil = levelsTerm('soil', ['sand', 'clay'], 'sand');
    const pair = modelDocument({
      terms: [material, soil, { kind: 'product', factors: [material, soil], name: 'material:soil' }],
      coefficients: [
        { name: 'material=steel', value: 1 },
        { name: 'material=lead', value: 2 },
        { name: 'soil=clay', value: 3 },
        { name: 'material=steel:soil=clay', value: 4 },
      ],
      dropped: ['material=lead:soil=clay'],
    });
    const file = writeText(folder, 'pair.csv', 'material,soil\nsteel,clay\nlead,sand\nlead,clay\n');
    const failure = failureOf(await scoreFile(pair, file, folder));
    expect(failure).toMatchObject({ code: 'level-unknown', where: { row: 3 } });
    expect(failure.message).toContain('material "lead" with soil "clay"');
  });
});

describe('a table that does not fit the model', () => {
  test('a column that is not there is named with its unit', async () => {
    const file = writeText(folder, 'cm.csv', 'age_years,diameter_cm,material,km_years\n1,10,pvc,1\n');
    const failure = failureOf(await scoreFile(model, file, folder));
    expect(failure.code).toBe('column-missing');
    expect(failure.where?.column).toBe('diameter_mm');
    expect(failure.remedy).toContain('in mm');
  });

  test('a column with the name of what is added has to be left out', async () => {
    const file = writeText(folder, 'taken.csv', `${HEAD},prediction\n${GOOD},7\n`);
    expect(failureOf(await scoreFile(model, file, folder)).code).toBe('field-conflict');
    soundValue(await scoreFile(model, file, folder, { columns: ['pipe'] }));
  });

  test('a table with a broken line is unreadable, and a header alone has no rows', async () => {
    const broken = table('broken.csv', GOOD, 'P2,1');
    expect(failureOf(await scoreFile(model, broken, folder)).code).toBe('table-unreadable');
    expect(soundValue(await scoreFile(model, table('none.csv'), folder)).rows).toBe(0);
    expect(failureOf(await scoreFile(model, join(folder, 'absent.csv'), folder)).code).toBe('table-missing');
    expect(existsSync(join(folder, 'absent.csv'))).toBe(false);
    expect(readdirSync(folder).filter((name) => name.includes('draft'))).toEqual([]);
  });

  test('an abort ends it', async () => {
    const stop = new AbortController();
    const rows = `${GOOD}\n`.repeat(200_000);
    const scoring = scoreFile(model, table('huge.csv', rows), folder, {
      signal: stop.signal,
      seen: () => stop.abort(),
    });
    expect(failureOf(await scoring).code).toBe('run-cancelled');
  });
});
