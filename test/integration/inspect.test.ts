import { execFile } from 'node:child_process';
import { mkdtemp, readFile, rm, stat, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { specification } from '../support/worker-site.js';

/** The program as built: `npm test` builds it first. */
const PROGRAM = fileURLToPath(new URL('../../dist/worker/main.js', import.meta.url));

const SPECIFICATION = [
  'commonfit: 1',
  'title: Breaks by age',
  'sites: [harrowmere, castlefen]',
  'response: {column: breaks}',
  'loss: poisson',
  'exposure: {column: km_years}',
  'terms: [{column: age_years}, {column: pressure_bar}]',
].join('\n');
const DIGEST = digestOf(canonicalText(specification()));

let folder = '';

beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-worker-'));
  await writeFile(join(folder, 'breaks.fit.yaml'), SPECIFICATION);
  await writeFile(
    join(folder, 'pipes.csv'),
    'breaks,km_years,age_years,pressure_bar,utility\n0,1.5,10,4,castlefen\n2,2,30,5,oakhythe\n1,1,50,3,castlefen\n',
  );
});
afterAll(() => rm(folder, { recursive: true, force: true }));

async function siteFile(name: string, policy: readonly string[], table = 'pipes.csv'): Promise<string> {
  const file = join(folder, `${name}.site.yaml`);
  const lines = [
    'commonfit-site: 1',
    'site: castlefen',
    'coordinator: {url: "wss://fit.example.net:7443", token-file: ./castlefen.token}',
    `table: {csv: ./${table}}`,
    'policy:',
    ...policy.map((line) => `  ${line}`),
  ];
  await writeFile(file, lines.join('\n'));
  return file;
}

function run(...args: string[]): Promise<{ code: number; stdout: string; stderr: string }> {
  return new Promise((resolve) => {
    const child = execFile(process.execPath, [PROGRAM, ...args], { cwd: folder }, (_error, stdout, stderr) =>
      resolve({ code: child.exitCode ?? -1, stdout, stderr }),
    );
  });
}

describe('inspect', () => {
  test('shows what would be read and what could leave, in 80 columns', async () => {
    const file = await siteFile('open', ['columns: any', 'rows-least: 3']);
    const { code, stdout, stderr } = await run('inspect', file, 'breaks.fit.yaml');
    expect({ code, stderr }).toEqual({ code: 0, stderr: '' });
    expect(stdout).toContain(DIGEST);
    expect(stdout).toContain('Rows used: 3.');
    expect(stdout).toMatch(/age_years\s+30\s+16\.33/);
    expect(stdout).toContain('would take part');
    for (const line of stdout.split('\n')) expect(line.length).toBeLessThanOrEqual(80);
  });

  test('as JSON it says the same to programs; p = 3 with the intercept', async () => {
    const file = await siteFile('open', ['columns: any', 'rows-least: 3', 'curvature-most: 0']);
    const { code, stdout } = await run('inspect', file, 'breaks.fit.yaml', '--json');
    expect(code).toBe(0);
    const inspection = JSON.parse(stdout);
    expect(inspection).toMatchObject({
      digest: DIGEST,
      site: 'castlefen',
      rows: { used: 3, dropped: 0 },
      response: { least: 0, most: 2, mean: 1 },
      limits: { curvatureMost: 0, numbersMost: 1_000_000, roundsMost: 2000 },
      refusals: [],
    });
    const numbers = inspection.departures.map((row: { numbers: number; kept: string | null }) => [
      row.numbers,
      row.kept === null,
    ]);
    expect(numbers).toEqual([
      [12, true],
      [4, true],
      [7, true],
      [43, false],
      [13, false],
      [10, false],
    ]);
  });

  test('a column the policy keeps: exit 5, and the table stays shut', async () => {
    const file = await siteFile('narrow', ['columns: [breaks, km_years, age_years]'], 'nowhere.csv');
    const { code, stdout } = await run('inspect', file, 'breaks.fit.yaml');
    expect(code).toBe(5);
    expect(stdout).toContain('[policy-column]');
    expect(stdout).not.toContain('[table-missing]');
  });

  test('too few rows: exit 5', async () => {
    const file = await siteFile('few', ['columns: any', 'rows-least: 4']);
    const { code, stdout } = await run('inspect', file, 'breaks.fit.yaml');
    expect(code).toBe(5);
    expect(stdout).toContain('[policy-rows]');
  });

  test('a table that is not there: exit 4', async () => {
    const file = await siteFile('lost', ['columns: any'], 'nowhere.csv');
    const { code, stdout } = await run('inspect', file, 'breaks.fit.yaml');
    expect(code).toBe(4);
    expect(stdout).toContain('[table-missing]');
  });

  test('a wrong document: exit 3, every error with its line', async () => {
    const file = await siteFile('wrong', ['columns: any', 'rows-lest: 4', 'approvals: maybe']);
    const { code, stdout, stderr } = await run('inspect', file, 'breaks.fit.yaml');
    expect({ code, stdout }).toEqual({ code: 3, stdout: '' });
    expect(stderr).toMatch(/wrong\.site\.yaml:7, policy\.rows-lest: .*rows-least/);
    expect(stderr).toMatch(/wrong\.site\.yaml:8, policy\.approvals/);
  });

  test('a wrong command line: exit 2', async () => {
    expect((await run('inspect')).code).toBe(2);
    expect((await run('inspect', 'a', 'b', '--jsn')).code).toBe(2);
  });
});

test('approve lets a specification in, once, in a file only the custodian can read', async () => {
  const file = await siteFile('careful', ['columns: any', 'rows-least: 3', 'approvals: listed']);
  expect((await run('inspect', file, 'breaks.fit.yaml')).code).toBe(5);
  const first = await run('approve', file, 'breaks.fit.yaml', '--json');
  expect(JSON.parse(first.stdout)).toMatchObject({ digest: DIGEST, added: true, needed: true });
  expect((await run('inspect', file, 'breaks.fit.yaml')).code).toBe(0);
  const again = await run('approve', file, DIGEST, '--json');
  expect(JSON.parse(again.stdout)).toMatchObject({ digest: DIGEST, added: false });
  const approvals = join(folder, 'careful.approvals');
  expect(
    (await readFile(approvals, 'utf8')).split('\n').filter((line) => line.startsWith(DIGEST)),
  ).toHaveLength(1);
  expect((await stat(approvals)).mode & 0o777).toBe(0o600);
});

test('split writes one table for each site', async () => {
  const { code, stdout } = await run('split', 'pipes.csv', '--by', 'utility', '--out', 'parts', '--json');
  expect(code).toBe(0);
  expect(JSON.parse(stdout)).toEqual([
    { site: 'castlefen', file: 'parts/castlefen.csv', rows: 2 },
    { site: 'oakhythe', file: 'parts/oakhythe.csv', rows: 1 },
  ]);
});

test('join with a token file that is not there: exit 3, and the file is named', async () => {
  const file = await siteFile('open', ['columns: any']);
  const { code, stderr } = await run('join', file);
  expect(code).toBe(3);
  expect(stderr).toContain('castlefen.token');
});

test('join does not send its token in the clear to another machine', async () => {
  const file = await siteFile('clear', ['columns: any']);
  const text = await readFile(file, 'utf8');
  await writeFile(file, text.replace('wss:', 'ws:'));
  const { code, stderr } = await run('join', file);
  expect(code).toBe(3);
  expect(stderr).toContain('--plain-text');
});
