import { mkdtemp, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { movedText } from '../../coordinator/report/moved-text.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { type StartFrom, startFromOf } from '../../coordinator/run/start-from.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { fitOn, type SitesInProcess, sitesInProcess } from '../support/in-process-fit.js';
import { SMALL_SITES, smallTable } from '../support/small-scenario.js';
import { parsedValue } from '../support/specifications.js';

const TERMS = [
  '  - {column: age_years, unit: year}',
  '  - {column: material, levels: [pvc, ductile-iron, cast-iron, steel], baseline: pvc}',
  '  - {column: pressure_bar, unit: bar}',
];

const fitOf = (terms: readonly string[], more: readonly string[] = []): string =>
  [
    'commonfit: 1',
    'title: Breaks by age and pressure',
    `sites: [${SMALL_SITES.join(', ')}]`,
    'response: {column: breaks}',
    'loss: poisson',
    'exposure: {column: km_years}',
    'terms:',
    ...terms,
    ...more,
    '',
  ].join('\n');

const specificationOf = (text: string): FitSpecification =>
  parsedValue(parseFitSpecification(text, 'breaks.fit.yaml'));

/** Before and after a year: a tenth more rows at every site. */
let folder = '';
let before = '';
let after = '';

beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-start-'));
  [before, after] = await Promise.all([300, 330].map((rows) => tableOf(rows)));
});
afterAll(() => rm(folder, { recursive: true, force: true }));

async function tableOf(rows: number): Promise<string> {
  const file = join(folder, `rows-${rows}.csv`);
  const parts = SMALL_SITES.map((site) => {
    const [head, ...lines] = smallTable(site, rows).trimEnd().split('\n');
    return { head: `${head},site`, lines: lines.map((line) => `${line},${site}`) };
  });
  await writeFile(file, [parts[0].head, ...parts.flatMap(({ lines }) => lines), ''].join('\n'));
  return file;
}

/** Reading a table takes seconds on a busy machine: each is read once for each specification. */
const sites = new Map<string, Promise<SitesInProcess>>();

async function fitInProcess(
  text: string,
  table: string,
  curvatureMost: number | null,
  start: StartFrom | null = null,
): Promise<ResultDocument> {
  const key = JSON.stringify([text, table, curvatureMost]);
  const known = sites.get(key) ?? sitesInProcess(text, table, curvatureMost);
  sites.set(key, known);
  return fitOn(await known, start);
}

const ended = async (text: string, curvatureMost: number | null): Promise<StartFrom> => {
  const result = await fitInProcess(text, before, curvatureMost);
  return startOf({ run: 'last-year', specification: specificationOf(text), result }, text);
};

function startOf(earlier: Parameters<typeof startFromOf>[0], text: string): StartFrom {
  const start = startFromOf(earlier, specificationOf(text));
  if (!start.ok) throw new Error(start.failure.message);
  return start.value;
}

describe('a fit made again with a tenth more rows', () => {
  test.each([
    { rung: 'curvature', curvatureMost: null, scratch: 4, warm: 3 },
    { rung: 'proximal', curvatureMost: 3, scratch: 9, warm: 3 },
    { rung: 'proximal', curvatureMost: 0, scratch: 31, warm: 24 },
  ])(
    'on the rung $rung ($curvatureMost matrices): rounds',
    async ({ rung, curvatureMost, scratch, warm }) => {
      const text = fitOf(TERMS);
      const start = await ended(text, curvatureMost);
      const cold = await fitInProcess(text, after, curvatureMost);
      const again = await fitInProcess(text, after, curvatureMost, start);
      expect([cold.rung, again.rung, again.outcome]).toEqual([rung, rung, 'solved']);
      expect([cold.rounds, again.rounds]).toEqual([scratch, warm]);
      for (const [name, value] of Object.entries(cold.fits[0].coefficients))
        expect(again.fits[0].coefficients[name], name).toBeCloseTo(value, curvatureMost === 0 ? 3 : 7);
    },
  );

  test('the result says from where, and what moved', async () => {
    const text = fitOf(TERMS, ['report: [covariance]']);
    const start = await ended(text, null);
    const result = await fitInProcess(text, after, null, start);
    expect(result.startedFrom).toEqual({
      run: 'last-year',
      coefficients: Object.fromEntries(start.coefficients),
      used: true,
    });
    expect(result.notes).toContain('starts from the coefficients of run last-year: all 5 are in both');
    const moved = result.moved ?? {};
    expect(Object.keys(moved)).toEqual(['(intercept)', ...Object.keys(result.fits[0].coefficients)]);
    const age = result.inference?.coefficients.find(({ name }) => name === 'age_years');
    const { age_years: ageBefore } = Object.fromEntries(start.coefficients);
    const change = result.fits[0].coefficients.age_years - ageBefore;
    expect(moved.age_years).toEqual({
      before: ageBefore,
      after: result.fits[0].coefficients.age_years,
      change,
      changeInStandardErrors: change / (age?.standardError ?? Number.NaN),
    });
    const words = movedText(result, 80);
    expect(words[1]).toBe('What moved since run last-year, the most first: before, now, change.');
    expect(words.join('\n')).toMatch(/age_years: \S+ → \S+, \S+ \(\S+ standard errors\)/);
    expect(movedText({ ...result, startedFrom: null, moved: null }, 80)).toEqual([]);
  });

  test('on the same rows the curvature at the start certifies it at once', async () => {
    const start = await ended(fitOf(TERMS), null);
    expect((await fitInProcess(fitOf(TERMS), before, null, start)).rounds).toBe(1);
  });
});

describe('a specification that changed', () => {
  const other = fitOf([
    '  - {column: age_years, unit: year, transform: sqrt}',
    TERMS[1],
    '  - {column: diameter_mm, unit: mm, transform: log}',
  ]);

  test('names go over where they mean the same; the rest starts at 0', async () => {
    const start = await ended(fitOf(TERMS), null);
    const changed = startOf(
      {
        run: 'last-year',
        specification: specificationOf(fitOf(TERMS)),
        result: await fitInProcess(fitOf(TERMS), before, null),
      },
      other,
    );
    expect(changed.redefined).toEqual(['age_years']);
    expect(changed.coefficients).toEqual(start.coefficients.filter(([name]) => name !== 'age_years'));
    const result = await fitInProcess(other, after, null, changed);
    const cold = await fitInProcess(other, after, null);
    expect(result.outcome).toBe('solved');
    expect(result.fits[0].objective).toBeCloseTo(cold.fits[0].objective, 9);
    expect(result.notes).toContain(
      'starts from the coefficients of run last-year: 3 of 5 are in both, the others start at 0; age_years meant something else there',
    );
    expect(Object.keys(result.moved ?? {})).toEqual([
      '(intercept)',
      'material=ductile-iron',
      'material=cast-iron',
      'material=steel',
    ]);
    const words = movedText(result, 80).join('\n');
    expect(words).toContain('New here: age_years and diameter_mm.');
    expect(words).toContain('No longer here: pressure_bar.');
  });

  test.each([
    ['a path of λ', ['penalty: [{kind: lasso, lambda: {count: 3, ratio: 0.1}}]'], 1, 'a path of λ begins'],
    ['coefficients in another unit', [], 1e4, 'was a unit changed?'],
  ])('%s: the start is not used, and a note says so', async (_, more, factor, words) => {
    const start = await ended(fitOf(TERMS), null);
    const coefficients = start.coefficients.map(
      ([name, value]) => [name, name === 'age_years' ? value * factor : value] as const,
    );
    const text = fitOf(TERMS, more);
    const result = await fitInProcess(text, after, null, { ...start, coefficients });
    const cold = await fitInProcess(text, after, null);
    expect(result.startedFrom?.used).toBe(false);
    expect(result.notes.join('\n')).toContain(words);
    expect(result.fits).toEqual(cold.fits);
  });
});

describe('a run that there is nothing to start from', () => {
  const text = fitOf(TERMS);
  const refusal = (result: Pick<ResultDocument, 'fits' | 'chosen'>, now = text): string => {
    const start = startFromOf(
      { run: 'last-year', specification: specificationOf(text), result },
      specificationOf(now),
    );
    if (start.ok) throw new Error('it was taken');
    expect(start.failure).toMatchObject({ code: 'field-value', where: { field: 'startFrom' } });
    return start.failure.message;
  };

  test('no fit, several fits, a fit without an optimum, another link, no name in common', async () => {
    const { fits } = await fitInProcess(text, before, null);
    expect(refusal({ fits: [], chosen: null })).toBe('Run last-year has no coefficients to start from.');
    expect(refusal({ fits: [fits[0], fits[0]], chosen: null })).toContain('has 2 fits and none was chosen');
    expect(refusal({ fits: [{ ...fits[0], outcome: 'unbounded' }], chosen: 0 })).toContain(
      'has no coefficients',
    );
    const squared = text
      .replace('loss: poisson', 'loss: squared')
      .replace('exposure: {column: km_years}\n', '');
    expect(refusal({ fits, chosen: 0 }, squared)).toBe(
      'The coefficients of run last-year are about log rates, those of this one about the response itself.',
    );
    expect(refusal({ fits, chosen: 0 }, fitOf(['  - {column: diameter_mm}']))).toContain(
      'No coefficient of run',
    );
  });
});
