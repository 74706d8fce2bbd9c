import { mkdir, readdir, writeFile } from 'node:fs/promises';
import { dirname, join } from 'node:path';
import { describe, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { until } from '../support/processes.js';
import { RawSocket } from '../support/raw-socket.js';
import {
  analystToken,
  bench,
  call,
  expectRunSolved,
  SPECIFICATION,
  socketOf,
  start,
} from '../support/service-bench.js';
import { helloOf } from '../support/toy-site.js';

/** Nothing that comes over the wire becomes a path: names that would lead out of the state folder, and odd ones. */
const NAMES = [
  ...['..', '../x', '../../etc/passwd', '..\\x', '/etc/passwd', '%2e%2e%2fx', './journal', 'tokens.json'],
  ...['a\u0000b', '\u0000', '\u202etxt', 'CON', '~', '$HOME', '.', ' ', 'x'.repeat(64)],
];
const BAIT = 'nobody may read this';

/** What would be read if a name led out of the folder of the runs; all files around the state folder. */
async function layBait(): Promise<void> {
  for (const file of ['x', 'runs/x/result.json', 'result.json', 'log.jsonl', 'runs/result.json']) {
    await mkdir(dirname(join(bench.state, file)), { recursive: true });
    await writeFile(join(bench.state, file), BAIT);
  }
}

/** All but the record of when tokens were used, which is written at any time. */
const filesAround = async (): Promise<string[]> =>
  (await readdir(bench.state, { recursive: true }))
    .filter((path) => !path.startsWith('token-uses.json'))
    .sort();

describe('the run of a request', () => {
  const ROUTES: [string, (run: string) => string][] = [
    ['GET', (run) => `/v1/runs/${run}`],
    ['GET', (run) => `/v1/runs/${run}/result`],
    ['GET', (run) => `/v1/runs/${run}/log`],
    ['POST', (run) => `/v1/runs/${run}/cancel`],
  ];

  test('is looked up, however it is written', async () => {
    await start();
    await layBait();
    const before = await filesAround();
    for (const [method, path] of ROUTES) {
      for (const name of [...NAMES, 'x'.repeat(5000)]) {
        const response = await call(path(encodeURIComponent(name)), { method });
        const text = await response.text();
        expect([400, 401, 404, 414]).toContain(response.status);
        expect(JSON.parse(text)).toMatchObject({
          code: expect.stringMatching(/^(not-found|field-value|unauthorised)$/),
        });
        expect(text).not.toContain(BAIT);
      }
    }
    expect(await filesAround()).toEqual(before);
  });

  test('is looked up where the path of the request is not normal either', async () => {
    const address = await start();
    await layBait();
    const token = await analystToken();
    for (const path of [
      '/v1/runs/../../x',
      '/v1/runs/..%2f..%2fx/result',
      '/v1/runs/%2e%2e/result',
      '//etc/passwd',
      '/v1/runs/%00/log',
      '/v1/runs/%ff',
      '/v1/runs/%',
    ]) {
      const raw = await RawSocket.open(address);
      raw.write(
        `GET ${path} HTTP/1.1\r\nHost: c\r\nConnection: close\r\nAuthorization: Bearer ${token}\r\n\r\n`,
      );
      await until('an answer', () => raw.ended);
      const text = raw.received.toString('utf8');
      expect(text).toMatch(/^HTTP\/1\.1 4\d\d .*"code":"(not-found|field-value)"/s);
      expect(text).not.toContain(BAIT);
    }
  });
});

test('the file name that comes with a specification is a word in messages only', async () => {
  await start();
  const before = await filesAround();
  for (const file of NAMES) {
    const response = await call('/v1/runs', {
      method: 'POST',
      headers: { 'content-type': 'application/json' },
      body: JSON.stringify({ specification: 'commonfit: 1\n', file }),
    });
    expect(response.status).toBe(422);
  }
  expect(await filesAround()).toEqual(before);
  const accepted = await call('/v1/runs', {
    method: 'POST',
    headers: { 'content-type': 'application/json' },
    body: JSON.stringify({ specification: SPECIFICATION, file: '../../x.fit.yaml' }),
  });
  const { run } = (await accepted.json()) as { run: string };
  expect(run).toMatch(/^\d{8}-\d{6}-[0-9a-f]{8}$/);
  const added = (await filesAround()).filter((path) => !before.includes(path));
  expect(added.every((path) => path.startsWith(`runs/${run}`))).toBe(true);
});

test('the site, software and kernel of a hello, and the run of an answer, are compared only', {
  timeout: 60_000,
}, async () => {
  const address = await start();
  const before = await filesAround();
  for (const name of NAMES) {
    const impostor = await socketOf(address, 'harrowmere');
    impostor.send({ ...helloOf('harrowmere'), site: name });
    expect(await impostor.closed).toBe(CLOSE_CODES.tokenRefused);
    const honest = await socketOf(address, 'harrowmere');
    honest.send({ ...helloOf('harrowmere'), software: name, kernel: name });
    honest.send({ kind: 'refusal', run: name, ask: 1, code: 'internal', message: name, remedy: name });
    await until('a welcome', () => honest.received.length > 0);
    honest.socket.close();
    await honest.closed;
  }
  const added = (await filesAround()).filter((path) => !before.includes(path));
  expect(added).toEqual([]);
  await expectRunSolved(address);
});
