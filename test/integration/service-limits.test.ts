import { once } from 'node:events';
import { request as httpRequest } from 'node:http';
import { connect as connectTls } from 'node:tls';
import { fileURLToPath } from 'node:url';
import { describe, expect, test } from 'vitest';
import { LIMITS } from '../../protocol/limits.js';
import { until } from '../support/processes.js';
import { RawSocket } from '../support/raw-socket.js';
import { refusalIn, refusalOf, upgradeRefusal } from '../support/refusals.js';
import {
  analystToken,
  bench,
  call,
  expectRunSolved,
  SPECIFICATION,
  siteToken,
  socketOf,
  start,
  submit,
} from '../support/service-bench.js';
import { ToySocket } from '../support/toy-site.js';

/** Every limit of the service: what is beyond it is refused with its code, and what is not beyond it goes on. */
describe('requests', () => {
  test('of one analyst a minute; another analyst and the health route are not held up', async () => {
    const address = await start({ requestsPerMinuteMost: 5 });
    for (let at = 0; at < 5; at++) expect((await call('/v1/runs')).status).toBe(200);
    const refused = await refusalOf(await call('/v1/runs'));
    expect(refused).toMatchObject({ status: 429, code: 'too-many-requests' });
    expect(refused.retryAfterS).toBeGreaterThan(0);
    expect(refused.retryAfterS).toBeLessThanOrEqual(12);
    expect((await fetch(`${address}/health/live`)).status).toBe(200);
    await expect(
      siteToken('harrowmere').then((token) => ToySocket.open(address, token)),
    ).resolves.toBeInstanceOf(ToySocket);
  });

  test('without a good token, of one address a minute; good ones from there go on', async () => {
    const address = await start({ refusalsPerMinuteMost: 5 });
    const wrong = { headers: { authorization: 'Bearer wrong' } };
    for (let at = 0; at < 3; at++) {
      expect(await refusalOf(await fetch(`${address}/v1/runs`, wrong))).toMatchObject({
        status: 401,
        code: 'unauthorised',
      });
    }
    for (let at = 0; at < 2; at++) {
      expect(await upgradeRefusal(address, 'wrong')).toMatchObject({ status: 401, code: 'token-refused' });
    }
    for (const refused of [
      await refusalOf(await fetch(`${address}/v1/runs`, wrong)),
      await upgradeRefusal(address, 'wrong'),
    ]) {
      expect(refused).toMatchObject({ status: 429, code: 'too-many-requests' });
      expect(refused.retryAfterS).toBeGreaterThan(0);
    }
    await expectRunSolved(address);
  });
});

describe('links', () => {
  test('of one site at once, and overall; the others of the same coordinator go on', async () => {
    const address = await start({ linksPerSiteMost: 2, linksMost: 3 });
    const token = await siteToken('harrowmere');
    for (let at = 0; at < 2; at++) expect(await ToySocket.open(address, token)).toBeInstanceOf(ToySocket);
    expect(await upgradeRefusal(address, token)).toEqual({
      status: 503,
      code: 'coordinator-full',
      retryAfterS: 10,
    });
    await socketOf(address, 'castlefen');
    expect(await upgradeRefusal(address, await siteToken('oakhythe'))).toMatchObject({
      status: 503,
      code: 'coordinator-full',
    });
  });

  test('that one site opens a minute', async () => {
    const address = await start({ linksPerMinuteMost: 2 });
    const token = await siteToken('harrowmere');
    for (let at = 0; at < 2; at++) {
      const opened = await ToySocket.open(address, token);
      if (!(opened instanceof ToySocket)) throw new Error('refused');
      opened.socket.close();
      await opened.closed;
    }
    expect(await upgradeRefusal(address, token)).toMatchObject({ status: 429, code: 'too-many-requests' });
    await socketOf(address, 'castlefen');
  });
});

describe('connections', () => {
  test('of one address; linked workers are not among them, and one that ends makes room', async () => {
    const address = await start({ connectionsPerAddressMost: 4 });
    for (let at = 0; at < 6; at++) await socketOf(address, 'harrowmere');
    const idle: RawSocket[] = [];
    for (let at = 0; at < 4; at++) idle.push(await RawSocket.open(address));
    const beyond = await RawSocket.open(address);
    await until('a refusal', () => beyond.ended);
    expect(refusalIn(beyond.received)).toEqual({ status: 503, code: 'coordinator-full', retryAfterS: 10 });
    idle[0].socket.destroy();
    await until(
      'room',
      async () => (await fetch(`${address}/health/live`).catch(() => null))?.status === 200,
    );
    for (const { socket } of idle) socket.destroy();
  });

  test('behind TLS those beyond it are closed before the handshake', async () => {
    const pem = (name: string): string =>
      fileURLToPath(new URL(`../reference/tls/${name}.pem`, import.meta.url));
    const address = await start({
      certFile: pem('loopback-cert'),
      keyFile: pem('loopback-key'),
      connectionsPerAddressMost: 1,
    });
    const first = await RawSocket.open(address);
    const { port } = new URL(address);
    const second = connectTls({ port: Number(port), host: '127.0.0.1', rejectUnauthorized: false });
    const [error] = (await once(second, 'error')) as [NodeJS.ErrnoException];
    expect(error.code).toBe('ECONNRESET');
    first.socket.destroy();
  });
});

describe('runs and streams', () => {
  const post = (specification: string, file = 'a.fit.yaml'): Promise<Response> =>
    call('/v1/runs', {
      method: 'POST',
      headers: { 'content-type': 'application/json' },
      body: JSON.stringify({ specification, file }),
    });

  test('runs that wait, also where many are submitted at once', async () => {
    await start({ waitingMost: 3 });
    const answers = await Promise.all(Array.from({ length: 12 }, () => post(SPECIFICATION)));
    const accepted = answers.filter(({ status }) => status === 201);
    expect(accepted).toHaveLength(3);
    for (const refused of answers.filter(({ status }) => status !== 201)) {
      expect(await refusalOf(refused)).toEqual({ status: 503, code: 'coordinator-full', retryAfterS: 10 });
    }
  });

  test('the size of a specification', async () => {
    await start();
    const refused = await refusalOf(await post(`# ${'x'.repeat(LIMITS.textMost)}`));
    expect(refused).toMatchObject({ status: 400, code: 'field-value' });
    expect((await post(SPECIFICATION)).status).toBe(201);
  });

  test('round logs that one analyst follows, and that all follow', async () => {
    await start({ streamsPerAnalystMost: 2, streamsMost: 3 });
    const run = await submit();
    const open: AbortController[] = [];
    const followAs = async (token: string): Promise<Response> => {
      const controller = new AbortController();
      open.push(controller);
      const headers = { authorization: `Bearer ${token}` };
      return fetch(`${bench.service?.address}/v1/runs/${run}/log`, { headers, signal: controller.signal });
    };
    const { openTokens } = await import('../../coordinator/service/tokens.js');
    const ines = await openTokens(bench.state).issue({ kind: 'analyst', name: 'ines' });
    if (!ines.ok) throw new Error(ines.failure.message);
    const own = await analystToken();
    expect((await followAs(own)).status).toBe(200);
    expect((await followAs(own)).status).toBe(200);
    expect(await refusalOf(await followAs(own))).toMatchObject({ status: 503, code: 'coordinator-full' });
    expect((await followAs(ines.value)).status).toBe(200);
    expect(await refusalOf(await followAs(ines.value))).toMatchObject({ code: 'coordinator-full' });
    for (const controller of open) controller.abort();
    await until('room', async () => (await followAs(own)).status === 200);
    for (const controller of open) controller.abort();
  });
});

test('a head larger than is taken, and bytes that are no request, are refused with their codes', async () => {
  const address = await start();
  for (const [bytes, status, code] of [
    [`GET / HTTP/1.1\r\nHost: c\r\nX: ${'x'.repeat(70_000)}\r\n\r\n`, 431, 'frame-too-large'],
    ['\u0016\u0003\u0001 no request\r\n\r\n', 400, 'field-value'],
  ] as const) {
    const raw = await RawSocket.open(address);
    raw.write(bytes);
    await until('a refusal', () => raw.ended);
    expect(refusalIn(raw.received)).toMatchObject({ status, code });
  }
});

test('an upgrade at any other path is refused, however it is written', async () => {
  const address = await start();
  for (const path of [
    '/',
    '//',
    '//x',
    '/v1/site/',
    '/v1/../v1/site',
    '/V1/site',
    'http://[',
    '/v1/site%00',
    '*',
  ]) {
    const raw = await RawSocket.open(address);
    raw.write(`GET ${path} HTTP/1.1\r\nHost: c\r\nConnection: Upgrade\r\nUpgrade: websocket\r\n\r\n`);
    await until('a refusal', () => raw.ended);
    expect(refusalIn(raw.received)).toMatchObject({ status: 404, code: 'not-found' });
  }
  expect((await fetch(`${address}/health/live`)).status).toBe(200);
});

test('a service that is told to stop does not wait for connections that never sent a request', async () => {
  const address = await start();
  const idle = await RawSocket.open(address);
  const started = performance.now();
  await bench.service?.close();
  bench.service = null;
  expect(performance.now() - started).toBeLessThan(5000);
  await until('the end of the idle connection', () => idle.ended);
});

test('a body that a stranger promises is not waited for', async () => {
  const address = await start();
  const { port } = new URL(address);
  const sent = httpRequest({
    ...{ port, host: '127.0.0.1', method: 'POST', path: '/v1/runs' },
    headers: {
      'content-type': 'application/json',
      'content-length': '6000000',
      authorization: 'Bearer wrong',
    },
  });
  sent.on('error', () => undefined);
  sent.flushHeaders();
  const [response] = (await once(sent, 'response')) as [{ statusCode: number }];
  expect(response.statusCode).toBe(401);
  sent.destroy();
});
