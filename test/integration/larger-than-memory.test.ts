/** Tables whose design is kept on disk: the results of a table in memory, and what becomes of the file of rows. */
import { existsSync, readdirSync, readlinkSync } from 'node:fs';
import { copyFile, truncate, writeFile } from 'node:fs/promises';
import { availableParallelism } from 'node:os';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { seededRandom } from '../../numerics/random.js';
import type { Program } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { siteFileOf } from '../support/small-scenario.js';
import { type Following, Stage } from '../support/stage.js';
import { mayMount, Volume } from '../support/volume.js';

/** What the everyday run leaves to COMMONFIT_LONG=1. */
const long = process.env.COMMONFIT_LONG === '1';
const PATIENT = { timeout: 120_000 } as const;
const SITES = ['harrowmere', 'castlefen'] as const;
/** Holds the responses, the predictors and a window of the tables below, but not their columns. */
const LIMIT = '20MB';
const ROWS = 25_000;
const OTHERS = Array.from({ length: 21 }, (_, j) => `reading_${j + 1}`);
const COLUMNS = ['age_years', 'pressure_bar', 'depth_m', ...OTHERS];
const FITS = {
  squared: ['loss: squared', 'response: {column: cost}', 'choose: {folds: 4, seed: 3}'],
  logistic: [
    'loss: logistic',
    'response: {column: failed, positive: yes}',
    'choose: {folds: {column: crew}}',
  ],
  long: [
    'loss: squared',
    'response: {column: cost}',
    'rounds: {tolerance: 1e-10, most: 1000, rung: proximal}',
    'barrier: {deadline: 1s, patience: 1m}',
  ],
} as const;
type Fit = keyof typeof FITS;

let stage: Stage;
const workers = new Map<string, Program>();

beforeAll(async () => {
  stage = await Stage.open('larger-than-memory');
  await stage.serve();
  for (const [index, site] of SITES.entries()) {
    await stage.write(`${site}.csv`, pipes(ROWS, 11 + index));
    await stage.write(`${site}.site.yaml`, siteFileOf(stage, site, `{csv: ./${site}.csv}`));
    await stage.admit(site);
  }
  for (const name of ['squared', 'logistic', 'long'] as const)
    await stage.write(`${name}.fit.yaml`, fitOf(name));
}, PATIENT.timeout);
afterAll(() => stage?.close());

function pipes(rows: number, seed: number): string {
  const random = seededRandom(seed);
  const lines = [`${COLUMNS.join(',')},cost,failed,crew`];
  for (let row = 0; row < rows; row++) {
    const x = COLUMNS.map((_, j) => 10 * j + random.normal());
    const eta = 0.4 * (x[0] - x[1] + 10) + 0.2 * (x[2] - 20);
    const failed = random.uniform() < 1 / (1 + Math.exp(-eta)) ? 'yes' : 'no';
    const cost = 3 + eta + random.normal();
    lines.push([...[...x, cost].map((value) => value.toFixed(4)), failed, 'abc'[row % 3]].join(','));
  }
  return `${lines.join('\n')}\n`;
}

const fitOf = (name: Fit): string =>
  [
    'commonfit: 1',
    'title: Pipes of two utilities',
    `sites: [${SITES.join(', ')}]`,
    ...FITS[name],
    `terms: [${COLUMNS.map((column) => `{column: ${column}}`).join(', ')}]`,
    'penalty:',
    `  - {kind: elastic-net, lambda: ${name === 'long' ? '0.01' : '[0.1, 0.01]'}, l1: 0.5}`,
    '',
  ].join('\n');

/** Starts the site's worker, in place of the one before. */
async function joinSite(site: string, more: readonly string[], file = `${site}.site.yaml`): Promise<Program> {
  await workers.get(site)?.kill();
  const worker = stage.start(programs.worker, 'join', file, '--json', ...more);
  workers.set(site, worker);
  await worker.says('Connected to');
  return worker;
}

function workerOf(site: string): Program {
  const worker = workers.get(site);
  if (worker === undefined) throw new Error(`no worker of ${site}`);
  return worker;
}

async function fitted(name: Fit): Promise<ResultDocument> {
  const { code, result } = await stage.submit(`${name}.fit.yaml`).outcome(PATIENT.timeout);
  expect(code).toBe(0);
  return JSON.parse(result) as ResultDocument;
}

/** Bytes of rows on disk, as the worker's log has it for each table it read. */
const bytesOnDisk = (worker: Program): number[] =>
  worker.stderr
    .split('\n')
    .filter((line) => line.includes('"event":"table"'))
    .map((line) => (JSON.parse(line) as { bytesOnDisk: number }).bytesOnDisk);

/** The files of rows that a process has open: they have no name, but a process tells what it has. */
function openRows({ pid }: Program): string[] {
  const folder = `/proc/${pid}/fd`;
  return readdirSync(folder)
    .map((number) => join(folder, number))
    .filter((file) => readlinkSync(file).includes('.rows-'));
}

const rowsLeftIn = (folder: string): string[] => readdirSync(folder).filter((name) => name.includes('.rows'));

/** Every number of a result with where it stands; the rest as it is, but for the words on threads. */
function expectSame(found: unknown, wanted: unknown, path = ''): void {
  if (path.endsWith('.kernel')) return;
  if (typeof wanted === 'number' && typeof found === 'number') {
    // gaps and residuals are rounding themselves
    const slack = /gap|kkt/i.test(path) ? 1e-8 : 1e-10 * Math.max(1, Math.abs(wanted));
    expect(Math.abs(found - wanted), path).toBeLessThanOrEqual(slack);
  } else if (typeof wanted === 'object' && wanted !== null) {
    expect(Object.keys(found as object), path).toEqual(Object.keys(wanted));
    for (const [key, value] of Object.entries(wanted))
      expectSame((found as Record<string, unknown>)[key], value, `${path}.${key}`);
  } else expect(found, path).toBe(wanted);
}

describe('a table larger than --memory', PATIENT, () => {
  const inMemory = new Map<Fit, ResultDocument>();
  beforeAll(async () => {
    for (const site of SITES) await joinSite(site, []);
    for (const name of ['squared', 'logistic'] as const) inMemory.set(name, await fitted(name));
    for (const site of SITES) expect(bytesOnDisk(workerOf(site))).toEqual([0, 0]);
    // together with the other option on how the rows are worked on
    const threads = String(Math.min(2, availableParallelism()));
    for (const site of SITES) await joinSite(site, ['--memory', LIMIT, '--threads', threads]);
  }, PATIENT.timeout);

  test.each(['squared', 'logistic'] as const)(
    '%s with folds: the result of the table in memory',
    async (name) => {
      expectSame(await fitted(name), inMemory.get(name));
      for (const site of SITES) {
        expect(bytesOnDisk(workerOf(site)).at(-1)).toBe(8 * ROWS * COLUMNS.length);
        expect(openRows(workerOf(site))).toEqual([]);
      }
      expect(rowsLeftIn(stage.folder)).toEqual([]);
    },
  );

  test('a limit that does not hold the responses: refused, and what is needed is named', async () => {
    const worker = await joinSite('castlefen', ['--memory', '5MB']);
    const { code, event } = await stage.submit('squared.fit.yaml').outcome(PATIENT.timeout);
    expect(code).toBe(14);
    expect(event.reason).toContain('site castlefen refused: The table cannot be read.');
    const needed =
      /--memory 5MB is too small for this table: .* (\d+)MB\. Join with --memory \1MB or more/.exec(
        worker.stderr,
      );
    expect(Number(needed?.[1])).toBeGreaterThan(5);
  });
});

describe.skipIf(!existsSync('/proc/self/fd'))('in the middle of a run', PATIENT, () => {
  let undisturbed = '';
  beforeAll(async () => {
    for (const site of SITES) {
      await stage.write(
        `${site}-slow.site.yaml`,
        siteFileOf(stage, site, `{csv: ./${site}.csv}`, ['curvature-most: 0']),
      );
      await joinSite(site, ['--memory', LIMIT], `${site}-slow.site.yaml`);
    }
    const { code, result } = await stage.submit('long.fit.yaml').outcome(PATIENT.timeout);
    expect(code).toBe(0);
    undisturbed = result;
  }, PATIENT.timeout);

  async function heldRun(): Promise<{ following: Following; worker: Program }> {
    const following = stage.submit('long.fit.yaml');
    await following.round(3);
    const worker = workerOf('castlefen');
    worker.signal('SIGSTOP');
    expect(following.has('outcome')).toBeUndefined();
    return { following, worker };
  }

  test('the file of rows is cut short: it is named, the table read again, and the result the same to the bit', async () => {
    const { following, worker } = await heldRun();
    const [file] = openRows(worker);
    await truncate(file, 4000);
    worker.signal('SIGCONT');
    const { code, result } = await following.outcome(PATIENT.timeout);
    expect(code).toBe(0);
    expect(result).toBe(undisturbed);
    expect(worker.stderr).toMatch(
      /The rows kept in \S+ are lost: the file was cut to 4000 bytes\. The table is read again\./,
    );
    expect(bytesOnDisk(worker)).toHaveLength(3);
  });

  test.runIf(long)(
    'the worker is killed and started again: nothing is left behind, and the result the same to the bit',
    async () => {
      const { following, worker } = await heldRun();
      expect(openRows(worker)).toHaveLength(1);
      await worker.kill();
      expect(rowsLeftIn(stage.folder)).toEqual([]);
      await joinSite('castlefen', ['--memory', LIMIT], 'castlefen-slow.site.yaml');
      const { code, result } = await following.outcome(PATIENT.timeout);
      expect(code).toBe(0);
      expect(result).toBe(undisturbed);
    },
  );
});

describe.skipIf(!mayMount || !long)('a disk that the rows do not fit on', PATIENT, () => {
  test('the run ends as refused, the space is given back, and the next one solves once there is room', async () => {
    const volume = await Volume.open('10m');
    try {
      await copyFile(join(stage.folder, 'castlefen.token'), join(volume.path, 'castlefen.token'));
      const file = join(volume.path, 'castlefen.site.yaml');
      await writeFile(file, siteFileOf(stage, 'castlefen', `{csv: ${join(stage.folder, 'castlefen.csv')}}`));
      await joinSite('harrowmere', ['--memory', LIMIT]);
      const worker = await joinSite('castlefen', ['--memory', LIMIT], file);
      await volume.fill(1000);
      const refused = await stage.submit('squared.fit.yaml').outcome(PATIENT.timeout);
      expect(refused.code).toBe(14);
      expect(refused.event.reason).toMatch(
        /site castlefen refused: The site cannot write to its disk\..*\[state-unwritable\]/,
      );
      expect(worker.stderr).toContain('The rows cannot be kept on disk (ENOSPC).');
      expect(openRows(worker)).toEqual([]);
      await volume.free();
      await fitted('squared');
      expect(bytesOnDisk(worker)).toEqual([8 * ROWS * COLUMNS.length]);
    } finally {
      await workers.get('castlefen')?.kill();
      await volume.close();
    }
  });
});
