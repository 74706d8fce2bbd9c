import { spawn } from 'node:child_process';
import { mkdtemp, readFile, rm, stat, writeFile } from 'node:fs/promises';
import { createServer } from 'node:http';
import type { AddressInfo } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';

const PROGRAM = fileURLToPath(new URL('../../dist/coordinator/main.js', import.meta.url));

let folder = '';
beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-commands-'));
});
afterAll(() => rm(folder, { recursive: true, force: true }));

interface Ended {
  readonly code: number | null;
  readonly stdout: string;
  readonly stderr: string;
}

function commonfit(args: readonly string[], env: Record<string, string> = {}): Promise<Ended> {
  const child = spawn(process.execPath, [PROGRAM, ...args], { cwd: folder, env: { PATH: '', ...env } });
  const texts = { stdout: '', stderr: '' };
  child.stdout.on('data', (piece) => {
    texts.stdout += piece;
  });
  child.stderr.on('data', (piece) => {
    texts.stderr += piece;
  });
  return new Promise((resolve, reject) => {
    child.once('error', reject);
    child.once('close', (code) => resolve({ code, ...texts }));
  });
}

async function written(name: string, text: string): Promise<string> {
  await writeFile(join(folder, name), text);
  return name;
}

const GOOD = `commonfit: 1
title: Pipe breaks
sites: [harrowmere, oakhythe]
response: {column: breaks}
loss: poisson
exposure: {column: km_years}
terms:
  - {column: age_years, unit: year}
  - {column: diameter_mm, transform: log}
  - {column: material, levels: [pvc, steel], baseline: pvc}
penalty:
  - {kind: ridge, lambda: 0.01, per-term: {age_years: 0}}
`;

const COMMANDS = 'check rehearse serve admit submit watch runs result cancel replay demo'.split(' ');

describe.concurrent('help', () => {
  test.each(COMMANDS)('%s --help has an example of itself and the exit codes', async (command) => {
    const { code, stdout } = await commonfit([command, '--help']);
    expect(code).toBe(0);
    expect(stdout).toMatch(new RegExp(`\nExamples?:\n +commonfit ${command}\\b`));
    expect(stdout).toMatch(/\nExit codes:\n +0 {2}done/);
    expect(stdout).toContain('  2  the command line is wrong');
  });

  test('the program names every command', async () => {
    const { code, stdout } = await commonfit(['--help']);
    expect(code).toBe(0);
    for (const command of COMMANDS) expect(stdout).toMatch(new RegExp(`^ +${command}\\b`, 'm'));
  });
});

describe.concurrent('the command line', () => {
  test.each([
    [[]],
    [['chek']],
    [['check']],
    [['check', 'a.fit.yaml', '--loud']],
    [['serve', '--listen', 'here']],
    [['serve', '--listen', '127.0.0.1:70000']],
    [['serve', '--tls-cert', 'chain.pem']],
    [['serve', '--log-level', 'chatty']],
    [['rehearse', 'a.fit.yaml', '--rows', 'a.csv']],
    [['admit']],
    [['admit', 'harrowmere', '--analyst', 'ines']],
    [['admit', '../harrowmere']],
    [['admit', 'harrowmere', '--may', 'watch']],
    [['admit', 'harrowmere', '--expires', '30']],
    [['admit', 'harrowmere', '--expires', '0d']],
    [['admit', 'harrowmere', '--revoke', '--expires', '30d']],
    [['admit', 'harrowmere', '--list']],
    [['runs', '--url', 'http://coordinator.example']],
    [['runs', '--ca-file', 'nowhere.pem']],
    [['replay']],
    [['runs', '--url', 'ftp://127.0.0.1']],
  ])('%j ends with 2 and says why on standard error', async (args) => {
    const { code, stdout, stderr } = await commonfit(args);
    expect(code).toBe(2);
    expect(stderr.trim()).not.toBe('');
    expect(stdout).toBe('');
  });
});

describe.concurrent('check', () => {
  test('says in words what a good document fits', async () => {
    const { code, stdout } = await commonfit(['check', await written('good.fit.yaml', GOOD)]);
    expect(code).toBe(0);
    expect(stdout.replace(/\s+/g, ' ')).toContain(
      'log of the expected breaks by Poisson regression per unit of exposure km_years',
    );
    expect(stdout).toContain('3 coefficients from 3 terms, and a shared intercept:');
    expect(stdout).toContain('age_years: age_years [year]');
    expect(stdout).toContain('diameter_mm: ln(diameter_mm)');
    expect(stdout).toContain('material=steel: 1 where material is steel, against pvc');
    expect(stdout).toContain('Penalty ridge, λ = 0.01');
    expect(stdout).toContain('age_years left out');
    expect(stdout).toMatch(/^[0-9a-f]{64}$/m);
  });

  test('for programs it is one line of JSON with the same digest', async () => {
    const file = await written('json.fit.yaml', GOOD);
    const { code, stdout } = await commonfit(['check', file, '--json']);
    const { stdout: words } = await commonfit(['check', file]);
    expect(code).toBe(0);
    const checked = JSON.parse(stdout);
    expect(checked.coefficients).toEqual(['age_years', 'diameter_mm', 'material=steel']);
    expect(words).toContain(checked.digest);
  });

  test('every error names file, line and field; the exit code is 3', async () => {
    const bad = GOOD.replace('loss: poisson', 'loss: poison').replace('transform: log', 'transfrom: log');
    const { code, stdout, stderr } = await commonfit(['check', await written('bad.fit.yaml', bad)]);
    expect(code).toBe(3);
    expect(stdout).toBe('');
    const text = stderr.replace(/\s+/g, ' ');
    expect(text).toMatch(/bad\.fit\.yaml:5, loss: /);
    expect(text).toMatch(/bad\.fit\.yaml:9, terms\[1\]/);
  });

  test('a file that is not there, and a text that is no YAML, are document errors', async () => {
    const missing = await commonfit(['check', 'nowhere.fit.yaml']);
    expect(missing.code).toBe(3);
    expect(missing.stderr).toContain('nowhere.fit.yaml');
    const torn = await commonfit(['check', await written('torn.fit.yaml', 'commonfit: [1\ntitle: "x')]);
    expect(torn.code).toBe(3);
    expect(torn.stderr).toMatch(/torn\.fit\.yaml:\d/);
  });

  test('with --json the failures are one line of JSON as well', async () => {
    const { code, stdout } = await commonfit(['check', 'nowhere.fit.yaml', '--json']);
    expect(code).toBe(3);
    expect(JSON.parse(stdout)).toMatchObject({
      event: 'failed',
      exit: 3,
      failures: [{ code: 'file-unreadable' }],
    });
  });
});

describe.concurrent('the analyst’s token and the coordinator', () => {
  test('without a token it ends with 5 and names the option', async () => {
    const { code, stderr } = await commonfit(['runs']);
    expect(code).toBe(5);
    expect(stderr.replace(/\s+/g, ' ')).toContain('--token-file');
  });

  test('where nothing listens it ends with 4 and names the address', async () => {
    const COMMONFIT_TOKEN_FILE = await written('some.token', 'abc\n');
    const { code, stderr } = await commonfit(['runs', '--url', 'http://127.0.0.1:1'], {
      COMMONFIT_TOKEN_FILE,
    });
    expect(code).toBe(4);
    expect(stderr.replace(/\s+/g, ' ')).toContain('http://127.0.0.1:1 cannot be reached (');
  });

  test('what answers but is no coordinator ends with 4', async () => {
    const server = createServer((_, reply) => void reply.end('<html>'));
    await new Promise<void>((resolve) => void server.listen(0, '127.0.0.1', resolve));
    try {
      const file = await written('other.token', 'abc\n');
      const url = `http://127.0.0.1:${(server.address() as AddressInfo).port}`;
      const { code, stderr } = await commonfit(['runs', '--url', url, '--token-file', file]);
      expect(code).toBe(4);
      expect(stderr.replace(/\s+/g, ' ')).toContain('does not speak as a commonfit coordinator does');
    } finally {
      server.close();
    }
  });

  test('submit looks at the document before it looks for a token', async () => {
    const file = await written('empty.fit.yaml', 'commonfit: 1\n');
    const { code } = await commonfit(['submit', file]);
    expect(code).toBe(3);
  });
});

describe.concurrent('admit', () => {
  test('writes a token that only the owner reads, and never over a file', async () => {
    const args = ['admit', 'harrowmere', '--state', 'state-a', '--out', 'harrowmere.token'];
    const first = await commonfit(args);
    expect(first.code).toBe(0);
    const token = await readFile(join(folder, 'harrowmere.token'), 'utf8');
    expect(token).toMatch(/^\S{20,}\n$/);
    expect((await stat(join(folder, 'harrowmere.token'))).mode & 0o777).toBe(0o600);
    const second = await commonfit(args);
    expect(second.code).toBe(7);
    expect(await readFile(join(folder, 'harrowmere.token'), 'utf8')).toBe(token);
  });

  test('prints a token alone on standard output; the state folder keeps no token', async () => {
    const { code, stdout } = await commonfit(['admit', '--analyst', 'ines', '--state', 'state-b']);
    expect(code).toBe(0);
    expect(stdout).toMatch(/^\S{20,}\n$/);
    expect(await readFile(join(folder, 'state-b', 'tokens.json'), 'utf8')).not.toContain(stdout.trim());
  });
});
