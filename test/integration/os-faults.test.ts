/** What a machine can do to the programs: each time one clear line on standard error and a documented exit code. */
import { spawn } from 'node:child_process';
import { once } from 'node:events';
import { mkdir, open, rm, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { type Ended, until } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { setSmallScenario, siteFileOf } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

const plain = (text: string): string => text.replace(/\s+/g, ' ').trim();
const pem = (name: string): string => fileURLToPath(new URL(`../reference/tls/${name}.pem`, import.meta.url));

let stage: Stage;
beforeAll(async () => {
  stage = await Stage.open('os-faults');
  await setSmallScenario(stage, 300, ['harrowmere', 'castlefen']);
}, PATIENT.timeout);
afterAll(() => stage?.close());

/** One message with one code, no stack, nothing on standard output. */
function expectOneLine({ code, stdout, stderr }: Ended, exit: number, says: RegExp): void {
  expect({ code, stdout, stderr: plain(stderr) }).toEqual({
    code: exit,
    stdout: '',
    stderr: expect.stringMatching(says),
  });
  expect(stderr.match(/\[[a-z]+(-[a-z]+)*\]/g)).toHaveLength(1);
  expect(stderr).not.toContain('defect');
}

const serveIn = (state: string, listen = '127.0.0.1:0', ...more: string[]): Promise<Ended> =>
  stage.commonfit('serve', '--listen', listen, '--state', state, '--log-level', 'error', ...more);

describe('an address that cannot be had: 7', PATIENT, () => {
  test('a port in use', async () => {
    const taken = new URL(stage.address).host;
    expectOneLine(
      await serveIn('other', taken),
      7,
      /^Port \d+ of 127\.0\.0\.1 is in use\. .*--listen.*\[port-in-use\]$/,
    );
  });

  test('an address that is not this machine’s', async () => {
    // 192.0.2.0/24 is kept for examples (RFC 5737).
    const ended = await serveIn('other', '192.0.2.1:7443', '--plain-text');
    expectOneLine(ended, 7, /^The coordinator cannot listen at 192\.0\.2\.1, port 7443: .*EADDRNOTAVAIL/);
  });
});

describe('a state folder that cannot be used: 7', PATIENT, () => {
  test('a file of its name', async () => {
    await stage.write('occupied', '');
    expectOneLine(
      await serveIn('occupied'),
      7,
      /occupied: The state folder cannot be .*\[state-unwritable\]$/,
    );
  });

  test('one that another coordinator uses', async () => {
    const says = new RegExp(
      `^\\S+coordinator\\.sock: Process ${stage.coordinator?.pid} uses this state folder`,
    );
    expectOneLine(await serveIn('state'), 7, says);
  });

  test.each([
    ['a folder in its place', (file: string) => mkdir(file)],
    ['of another content', (file: string) => writeFile(file, '{"format":1,"tok')],
  ])('tokens that cannot be read: %s', async (name, spoil) => {
    const state = `tokens-${name.length}`;
    await mkdir(join(stage.folder, state));
    await spoil(join(stage.folder, state, 'tokens.json'));
    expectOneLine(
      await serveIn(state),
      7,
      /tokens\.json: The token file cannot be used: .*\[file-unreadable\]$/,
    );
  });
});

describe('a token file that cannot be used', PATIENT, () => {
  const files: readonly [string, (file: string) => Promise<unknown>, RegExp][] = [
    ['is missing', async () => undefined, /no such file|ENOENT/],
    ['is a folder', (file) => mkdir(file), /cannot be read \(EISDIR\)/],
    ['is empty', (file) => writeFile(file, ''), /does not hold one token/],
    ['holds two', (file) => writeFile(file, 'one\ntwo\n'), /does not hold one token/],
  ];

  test.each(files)('%s: 3 of the worker, 5 of the analyst', async (name, make, says) => {
    const file = `${name.replaceAll(' ', '-')}.token`;
    await make(join(stage.folder, file));
    const site = siteFileOf(stage, 'castlefen', '{csv: ./castlefen.csv}').replace('castlefen.token', file);
    await stage.write('tokenless.site.yaml', site);
    const joined = await stage.worker('join', 'tokenless.site.yaml');
    expect(joined.code).toBe(3);
    expect(plain(joined.stderr)).toMatch(
      new RegExp(`${file}: .*(${says.source}).*\\[(file-unreadable|field-value)\\]`),
    );
    const runs = await stage.commonfit('runs', '--url', stage.address, '--token-file', file);
    expectOneLine(runs, 5, new RegExp(`^${file}: .*(${says.source})`));
  });
});

describe(
  'a certificate whose time is not now: 9 of the analyst, 6 of the worker, and the clock is named',
  PATIENT,
  () => {
    test.each([
      [
        'expired',
        'expired',
        'expired-cert',
        /it or its authority has expired, or the clock of this machine is ahead/,
      ],
      [
        'future',
        'not yet valid',
        'future-cert',
        /it or its authority is not valid yet, or the clock of this machine is behind/,
      ],
      [
        'lapsed',
        'of an authority that has expired',
        'lapsed-authority',
        /it or its authority has expired, or the clock/,
      ],
    ])('%s', async (name, _, authority, says) => {
      const state = `${name}-state`;
      const serving = stage.start(
        programs.commonfit,
        ...['serve', '--listen', '127.0.0.1:0', '--state', state],
        ...['--tls-cert', pem(`${name}-cert`), '--tls-key', pem(`${name}-key`)],
      );
      const address =
        /coordinator is at (\S+),/.exec(await serving.says(/coordinator is at \S+,/))?.[1] ?? '';
      if (name !== 'lapsed')
        expect(serving.stderr).toMatch(/The certificate of this coordinator is valid from .* to /);
      const runs = await stage.commonfit(
        ...['runs', '--url', address, '--token-file', `${state}/analyst.token`, '--ca-file', pem(authority)],
      );
      expectOneLine(runs, 9, says);
      const site = siteFileOf(stage, 'castlefen', '{csv: ./castlefen.csv}')
        .replace(stage.address.replace(/^http/, 'ws'), address.replace(/^http/, 'ws'))
        .replace('.token}', `.token, ca-file: ${pem(authority)}}`);
      await stage.write(`${name}.site.yaml`, site);
      const joined = await stage.worker('join', `${name}.site.yaml`);
      expect(joined.code).toBe(6);
      expect(plain(joined.stderr)).toMatch(says);
      await serving.kill();
    });
  },
);

describe('output that cannot be written', PATIENT, () => {
  test('of a command, on a full disk: 7', async () => {
    const full = await open('/dev/full', 'w');
    const token = ['--url', stage.address, '--token-file', 'state/analyst.token'];
    const command = spawn(process.execPath, [programs.commonfit, 'runs', ...token], {
      ...{ cwd: stage.folder, env: { PATH: '' }, stdio: ['ignore', full.fd, 'pipe'] },
    });
    let stderr = '';
    command.stderr?.on('data', (piece: Buffer) => {
      stderr += piece.toString();
    });
    const [code] = await once(command, 'close');
    await full.close();
    expectOneLine({ code, signal: null, stdout: '', stderr }, 7, /^The output cannot be written \(ENOSPC\)/);
  });

  test('of the operational log: the service goes on', async () => {
    const full = await open('/dev/full', 'w');
    const service = spawn(
      process.execPath,
      [programs.commonfit, 'serve', '--listen', '127.0.0.1:0', '--state', 'unlogged', '--log-level', 'debug'],
      { cwd: stage.folder, env: { PATH: '' }, stdio: ['ignore', 'pipe', full.fd] },
    );
    try {
      let stdout = '';
      service.stdout?.on('data', (piece: Buffer) => {
        stdout += piece.toString();
      });
      const [, address = ''] = await until('the address', () => /coordinator is at (\S+),/.exec(stdout));
      // A refused worker is noted in the log.
      await fetch(`${address}/v1/runs`, { headers: { authorization: 'Bearer wrong' } });
      expect((await fetch(`${address}/health/live`)).status).toBe(200);
      expect(service.exitCode).toBeNull();
    } finally {
      service.kill('SIGKILL');
      await full.close();
    }
  });
});

test('the folder of a run vanishes: the run stands still and says so', PATIENT, async () => {
  for (const site of ['harrowmere', 'castlefen']) stage.join(site);
  const following = stage.submit('long.fit.yaml');
  await stage.holdAt(following, 3, 'castlefen');
  await rm(join(stage.folder, 'state', 'runs', await following.run()), { recursive: true });
  stage.workerOf('castlefen').signal('SIGCONT');
  await until('the coordinator to notice', () => stage.coordinator?.stderr.includes('the file was removed'));
  const ready = await fetch(`${stage.address}/health/ready`);
  expect(ready.status).toBe(503);
  expect(await ready.json()).toMatchObject({ code: 'state-unwritable' });
  await following.program.kill();
});
