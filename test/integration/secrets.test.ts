import { readdir, readFile, stat } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { until } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { RawSocket } from '../support/raw-socket.js';
import { setSmallScenario } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

/** One coordinator that logs all it can, through good and bad requests: what its log, and the files, give away. */
const SITES = ['harrowmere', 'castlefen'];
/** Looks like a token of ours, and is none. */
const WRONG = 'c2VjcmV0LXRoYXQtd2FzLW5ldmVyLWlzc3VlZC1oZXJl';

let stage: Stage;
const said: string[] = [];
const secrets: string[] = [WRONG];

beforeAll(async () => {
  stage = await Stage.open('secrets');
  const serve = ['serve', '--listen', '127.0.0.1:0', '--state', 'state', '--log-level', 'debug'];
  const coordinator = stage.start(programs.commonfit, ...serve);
  const address =
    /coordinator is at (\S+),/.exec(await coordinator.says(/coordinator is at \S+,/))?.[1] ?? '';
  stage.serve = async () => {};
  stage.address = address;
  await setSmallScenario(stage, 60, SITES);
  await stage.write('sleeper.token', WRONG);
  for (const site of SITES) secrets.push((await stage.read(`${site}.token`)).trim());
  secrets.push((await stage.read('state/analyst.token')).trim());

  const workers = SITES.map((site) => stage.join(site));
  const { event } = await stage.submit('long.fit.yaml').outcome();
  expect(event.outcome).toBe('solved');
  const wrongWorker = (await stage.read('harrowmere.site.yaml')).replace('harrowmere.token', 'sleeper.token');
  await stage.write('sleeper.site.yaml', wrongWorker);
  const endings = [
    await stage.worker('join', 'sleeper.site.yaml'),
    await stage.worker('join', 'sleeper.site.yaml', '--json'),
    await stage.commonfit('runs', '--url', address, '--token-file', 'sleeper.token'),
    await stage.commonfit('runs', '--url', address, '--token-file', 'castlefen.token'),
    await stage.analyst('runs'),
  ];
  const [, , analystToken] = secrets;
  for (const authorization of [
    `Bearer ${WRONG}`,
    `bearer ${WRONG} ${WRONG}`,
    `Basic ${WRONG}`,
    WRONG,
    `Bearer ${analystToken}`,
  ]) {
    for (const path of ['/v1/runs', '/v1/site', `/v1/runs/${WRONG}`, `/nowhere?token=${WRONG}`]) {
      await (await fetch(`${address}${path}`, { headers: { authorization } })).text();
    }
  }
  const raw = await RawSocket.open(address);
  raw.write(`GET /v1/runs HTTP/1.1\r\nAuthorization: Bearer ${analystToken}\r\n broken`);
  raw.write('\r\n\r\n');
  await until('the end of a broken request', () => raw.ended);
  said.push(raw.received.toString('latin1'));
  await stage.commonfit('admit', 'castlefen', '--state', 'state', '--revoke');
  await until('the end of a worker', () => !workers[1].running);
  coordinator.signal('SIGTERM');
  await coordinator.end();
  for (const { stdout, stderr } of [...endings, ...workers, coordinator]) said.push(stdout, stderr);
}, PATIENT.timeout);
afterAll(() => stage?.close());

describe('logs and output', () => {
  test('say what was refused', () => {
    const log = said.join('\n');
    for (const code of ['token-refused', 'unauthorised']) expect(log).toContain(`"code":"${code}"`);
    expect(log).toContain('"event":"connected"');
  });

  test('hold no token, good or wrong, on any stream of any program', () => {
    for (const secret of secrets) {
      expect(secret.length).toBeGreaterThan(40);
      for (const text of said) expect(text).not.toContain(secret);
    }
  });
});

describe('what is written', () => {
  async function filesUnder(folder: string): Promise<string[]> {
    const names = await readdir(folder, { recursive: true });
    return names.map((name) => join(folder, name));
  }

  test('in the state folder is for its owner only, folders too', async () => {
    const state = join(stage.folder, 'state');
    const paths = [state, ...(await filesUnder(state))];
    const names = paths.map((path) => path.slice(path.lastIndexOf('/') + 1));
    const written = [
      'tokens.json',
      'token-uses.json',
      'analyst.token',
      'journal',
      'specification.yaml',
      'log.jsonl',
      'result.json',
      'coefficients.csv',
      'rounds.csv',
    ];
    expect(names).toEqual(expect.arrayContaining(written));
    for (const path of paths) {
      const found = await stat(path);
      expect(`${path} ${(found.mode & 0o777).toString(8)}`).toBe(
        `${path} ${found.isDirectory() ? '700' : '600'}`,
      );
    }
  });

  test('beside the site file: the ledger and the token are the owner’s', async () => {
    for (const file of ['harrowmere.ledger', 'harrowmere.token']) {
      expect((await stat(join(stage.folder, file))).mode & 0o777).toBe(0o600);
    }
  });

  test('holds no token but the two files made to hand one over', async () => {
    const paths = await filesUnder(join(stage.folder, 'state'));
    for (const path of paths) {
      if ((await stat(path)).isDirectory() || path.endsWith('analyst.token')) continue;
      const text = await readFile(path, 'latin1');
      for (const secret of secrets) expect(text).not.toContain(secret);
    }
  });
});
