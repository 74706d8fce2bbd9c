import { readdir, readFile, rm } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import type { Failure } from '../../protocol/failure.js';
import { until } from '../support/processes.js';
import { siteFileOf } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

let stage: Stage;

beforeAll(async () => {
  stage = await Stage.open('bad-input');
  await stage.serve();
  await stage.admit('castlefen');
  await stage.write('castlefen.site.yaml', siteFileOf(stage, 'castlefen', '{csv: ./pipes.csv}'));
  stage.join('castlefen');
}, PATIENT.timeout);
afterAll(() => stage?.close());

const plain = (text: string): string => text.replace(/\s+/g, ' ');

const SPECIFICATION = `commonfit: 1
title: Breaks by age
sites: [castlefen]
response: {column: breaks}
loss: poisson
exposure: {column: km_years}
terms:
  - {column: age_years}
  - {column: material, levels: [pvc, steel], baseline: pvc}
barrier: {deadline: 10s, patience: 30s}
`;

describe('a document with errors', () => {
  const wrong = SPECIFICATION.replace('deadline: 10s', 'dedline: 10s')
    .replace('title: Breaks by age', 'title: [Breaks]')
    .replace('{column: km_years}', '{column: km_years}\noffset: {column: log_km}')
    .concat('penalty: [{kind: ridge, lambda: -0.5}]\n');

  test.each<[string, RegExp]>([
    [
      'an unknown field, with the nearest known name',
      /wrong\.fit\.yaml:11, barrier\.dedline: .*deadline.*\[field-unknown\]/,
    ],
    ['a wrong type', /wrong\.fit\.yaml:2, title: .*\[field-type\]/],
    [
      'exposure and offset together',
      /wrong\.fit\.yaml:7, offset: Found both exposure and offset.*\[field-conflict\]/,
    ],
    ['a negative λ', /wrong\.fit\.yaml:12, penalty\[0\]\.lambda: .*-0\.5.*\[field-value\]/],
  ])('%s', async (_, expected) => {
    expect(await complaints()).toMatch(expected);
  });

  let told: Promise<string> | null = null;
  /** What submit says; nothing reaches the coordinator. */
  function complaints(): Promise<string> {
    told ??= (async () => {
      await stage.write('wrong.fit.yaml', wrong);
      const { code, stderr } = await stage.analyst('submit', 'wrong.fit.yaml');
      expect(code).toBe(3);
      expect((await stage.analyst('runs')).stdout).toBe('No run yet.\n');
      return plain(stderr);
    })();
    return told;
  }
});

describe('a site that does not come', () => {
  test('the run waits and names it, then ends as site-missing', async () => {
    const text = SPECIFICATION.replace('[castlefen]', '[castlefen, saltmarsh]');
    await stage.write('alone.fit.yaml', text.replace(/deadline: .*}/, 'deadline: 1s, patience: 1s}'));
    const following = stage.submit('alone.fit.yaml');
    expect((await following.event('waiting')).sites).toEqual(['saltmarsh']);
    const { code, event } = await following.outcome();
    expect(code).toBe(13);
    expect(event.outcome).toBe('site-missing');
    expect(event.reason).toContain('saltmarsh');
    expect(event.reason).not.toContain('castlefen');
  });
});

/** A table that a fit cannot be made of. Each `cell` is in the table, and must never be seen outside the site. */
interface BadTable {
  readonly code: string;
  /** Null: no file. */
  readonly table: readonly string[] | null;
  readonly row?: number;
  readonly column?: string;
  readonly cell?: string;
  readonly spec?: (text: string) => string;
}

const HEADER = 'breaks,km_years,age_years,material';
const GOOD_CELL = '31.0625';
const GOOD = [`1,2.5,${GOOD_CELL},pvc`, '0,1.25,44,steel', '2,3.5,12,pvc'];
const withRow = (row: string): string[] => [HEADER, ...GOOD, row, row];
const logistic = (text: string): string =>
  text
    .replace('{column: breaks}', '{column: breaks, positive: yes}')
    .replace('poisson', 'logistic')
    .replace(/exposure: .*\n/, '');

const BAD_TABLES: Readonly<Record<string, BadTable>> = {
  'no file': { code: 'table-missing', table: null },
  'a file of no bytes': { code: 'table-empty', table: [] },
  'a header alone': { code: 'table-empty', table: [HEADER] },
  'a name twice in the header': {
    code: 'header-duplicate',
    table: [`${HEADER},age_years`, '1,2.5,31.0625,pvc,7'],
    column: 'age_years',
  },
  'a column that is not there': {
    code: 'column-missing',
    table: [HEADER.replace('age_years', 'age_year_secret'), ...GOOD],
    column: 'age_years',
    cell: 'age_year_secret',
  },
  'text where numbers are': {
    code: 'column-not-numeric',
    table: withRow('1,2.5,about-50,pvc'),
    ...{ row: 4, column: 'age_years', cell: 'about-50' },
  },
  NaN: { code: 'value-not-finite', table: withRow('1,NaN,31,pvc'), row: 4, column: 'km_years', cell: 'NaN' },
  'an infinity': {
    code: 'value-not-finite',
    table: withRow('-Infinity,2.5,31,pvc'),
    ...{ row: 4, column: 'breaks', cell: '-Infinity' },
  },
  'a number beyond float64': {
    code: 'value-not-finite',
    table: withRow('1,2.5,7.25e999,pvc'),
    ...{ row: 4, column: 'age_years', cell: '7.25e999' },
  },
  'a missing value': {
    code: 'value-missing',
    table: withRow('1,2.5,,pvc'),
    ...{ row: 4, column: 'age_years' },
  },
  'only rows with missing values, dropped': {
    code: 'no-rows',
    table: [HEADER, '1,2.5,,pvc', '2,,31,steel'],
    spec: (text) => `${text}missing: drop\n`,
  },
  'a level that is not listed': {
    code: 'level-unknown',
    table: withRow('1,2.5,31,oaken-stave'),
    ...{ row: 4, column: 'material', cell: 'oaken-stave' },
  },
  'an exposure of zero': {
    code: 'exposure-not-positive',
    table: withRow('1,0.000,31,pvc'),
    ...{ row: 4, column: 'km_years' },
  },
  'a negative exposure': {
    code: 'exposure-not-positive',
    table: withRow('1,-8.0625,31,pvc'),
    ...{ row: 4, column: 'km_years', cell: '-8.0625' },
  },
  'a negative count': {
    code: 'response-range',
    table: withRow('-3.75,2.5,31,pvc'),
    ...{ row: 4, column: 'breaks', cell: '-3.75' },
  },
  'a third class': {
    code: 'response-range',
    table: [HEADER, 'yes,1,31,pvc', 'no-never,1,20,pvc', 'perhaps-so,1,5,steel'],
    ...{ row: 3, column: 'breaks', cell: 'perhaps-so' },
    spec: logistic,
  },
  'a logarithm of a negative value': {
    code: 'value-not-finite',
    table: withRow('1,2.5,-61.5,pvc'),
    ...{ row: 4, column: 'age_years', cell: '-61.5' },
    spec: (text) => text.replace('{column: age_years}', '{column: age_years, transform: log}'),
  },
  'a torn record': {
    code: 'table-unreadable',
    table: withRow('1,2.5,torn-record'),
    cell: 'torn-record',
  },
};

/** Everything that the coordinator has of a run, in one text; the journal holds each reply as it came. */
async function coordinatorKeeps(run: string): Promise<string> {
  const folder = join(stage.folder, 'state', 'runs', run);
  const files = await Promise.all(
    (await readdir(folder)).map((file) => readFile(join(folder, file), 'latin1')),
  );
  return [...files, stage.coordinator?.stderr ?? ''].join('\n');
}

describe('a table with errors', () => {
  test.each(Object.entries(BAD_TABLES))('%s', async (_, bad) => {
    const { code, table, row, column, cell, spec = (text: string) => text } = bad;
    if (table === null) await rm(join(stage.folder, 'pipes.csv'), { force: true });
    else await stage.write('pipes.csv', table.map((line) => `${line}\n`).join(''));
    await stage.write('bad.fit.yaml', spec(SPECIFICATION));
    const following = stage.submit('bad.fit.yaml');
    const [inspected, outcome] = await Promise.all([
      stage.worker('inspect', 'castlefen.site.yaml', 'bad.fit.yaml', '--json'),
      following.outcome(),
    ]);

    // the custodian sees everything, before a run and in the log of the worker
    const run = await following.run();
    const { refusals } = JSON.parse(inspected.stdout) as { refusals: Failure[] };
    expect(inspected.code).toBe(4);
    expect(refusals).toHaveLength(1);
    const logged = await until('the refusal in the log of the worker', () =>
      stage
        .workerOf('castlefen')
        .stderr.split('\n')
        .filter((line) => line.includes('"event":"refused"') && line.includes(run))
        .map((line) => JSON.parse(line) as { failure: Failure })
        .at(0),
    );
    for (const failure of [refusals[0], logged.failure]) {
      expect(failure.code).toBe(code);
      expect(failure.where).toMatchObject({ ...(row && { row }), ...(column && { column }) });
      if (cell !== undefined) expect(failure.message).toContain(cell);
    }

    // the analyst sees the site, the code and whom to ask; no cell leaves
    expect(outcome.code).toBe(14);
    expect(outcome.event).toMatchObject({ outcome: 'refused', rounds: 0 });
    expect(outcome.event.reason).toContain('site castlefen refused: ');
    expect(outcome.event.reason).toContain(`[${code}]`);
    expect(outcome.event.reason).toContain("The custodian finds the details in the worker's log.");
    if (column !== undefined) expect(outcome.event.reason).toContain(column);
    expect(await stage.resultOf(run, 'journal')).toContain(code);
    const kept = await coordinatorKeeps(run);
    for (const secret of [cell, GOOD_CELL, 'pipes.csv'])
      if (secret !== undefined) expect(kept).not.toContain(secret);
  });

  test('the worker goes on: the same site takes part once its table is mended', async () => {
    const rows = Array.from(
      { length: 40 },
      (_, i) => `${i % 3},${1 + (i % 4)},${5 + ((7 * i) % 31)},${i % 2 ? 'pvc' : 'steel'}`,
    );
    await stage.write('pipes.csv', [HEADER, ...rows, ''].join('\n'));
    await stage.write('good.fit.yaml', SPECIFICATION);
    const { code, event } = await stage.submit('good.fit.yaml').outcome();
    expect(event).toMatchObject({ outcome: 'solved' });
    expect(code).toBe(0);
  });
});
