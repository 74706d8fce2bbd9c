import { mkdtemp, readdir, readFile, rm, stat } from 'node:fs/promises';
import { createServer } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import { type Service, startService } from '../../coordinator/service/service.js';
import type { ServiceOptions } from '../../coordinator/service/settings.js';
import { openTokens } from '../../coordinator/service/tokens.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { LIMITS } from '../../protocol/limits.js';
import type { Answer, Ask } from '../../protocol/messages/round.js';
import { TOY_ROUNDS, toyAnswer, toyRun } from '../support/toy-run.js';
import { helloOf, ToySocket, toySite } from '../support/toy-site.js';

const SPECIFICATION = [
  'commonfit: 1',
  'title: Mean pressure',
  'sites: [harrowmere, castlefen]',
  'response: {column: pressure_bar}',
  'loss: squared',
  'terms: [{column: age_years}]',
  'barrier: {deadline: 1s, patience: 30s}',
].join('\n');
const MEANS = { harrowmere: 3.1, castlefen: -2.2 };

let state = '';
let service: Service | null = null;

beforeEach(async () => {
  state = await mkdtemp(join(tmpdir(), 'commonfit-service-'));
});
afterEach(async () => {
  await service?.close();
  service = null;
  await rm(state, { recursive: true });
});

async function start(more: Partial<ServiceOptions> = {}): Promise<string> {
  const started = await startService({ state, port: 0, logLevel: 'silent', ...more }, { fit: toyRun });
  if (!started.ok) throw new Error(started.failure.message);
  service = started.value;
  return started.value.address;
}

const analystToken = async (): Promise<string> =>
  (await readFile(join(state, 'analyst.token'), 'utf8')).trim();

async function siteToken(name: string): Promise<string> {
  const token = await openTokens(state).issue({ kind: 'site', name });
  if (!token.ok) throw new Error(token.failure.message);
  return token.value;
}

async function call(path: string, init: RequestInit = {}): Promise<Response> {
  const headers = { authorization: `Bearer ${await analystToken()}`, ...init.headers };
  return fetch(`${service?.address}${path}`, { ...init, headers });
}

async function submit(specification = SPECIFICATION): Promise<string> {
  const response = await call('/v1/runs', {
    method: 'POST',
    headers: { 'content-type': 'application/json' },
    body: JSON.stringify({ specification, file: 'pressure.fit.yaml' }),
  });
  expect(response.status).toBe(201);
  return ((await response.json()) as { run: string }).run;
}

/** The events of the log from after `lastId` to the outcome. */
async function follow(run: string, lastId?: number): Promise<{ id: number; event: LogEvent }[]> {
  const headers: Record<string, string> = lastId === undefined ? {} : { 'last-event-id': String(lastId) };
  const text = await (await call(`/v1/runs/${run}/log`, { headers })).text();
  return [...text.matchAll(/^id: (\d+)\ndata: (.*)\n\n/gm)].map(([, id, data]) => ({
    id: Number(id),
    event: JSON.parse(data),
  }));
}

async function socketOf(address: string, site: string): Promise<ToySocket> {
  const opened = await ToySocket.open(address, await siteToken(site));
  if (!(opened instanceof ToySocket)) throw new Error(`refused with ${opened.status}`);
  return opened;
}

const connectBoth = async (address: string): Promise<ToySocket[]> =>
  Promise.all(
    Object.entries(MEANS).map(async ([site, mean]) => toySite(address, await siteToken(site), site, mean)),
  );

/** A run on the same coordinator goes to its end: whatever came before did it no harm. */
async function expectRunSolved(address: string): Promise<void> {
  await connectBoth(address);
  const run = await submit();
  expect((await follow(run)).at(-1)?.event).toMatchObject({ event: 'outcome', outcome: 'solved' });
}

describe('analysts', () => {
  test('submit, follow, and fetch the result', async () => {
    const address = await start();
    const run = await submit();
    expect(await (await call(`/v1/runs/${run}`)).json()).toMatchObject({ state: 'waiting', outcome: null });
    const early = await call(`/v1/runs/${run}/result`);
    expect(early.status).toBe(409);
    expect(await early.json()).toMatchObject({ code: 'not-found' });

    const following = follow(run);
    await connectBoth(address);
    const events = await following;
    expect(events.map(({ id }) => id)).toEqual(events.map((_, index) => index + 1));
    expect(events[0].event).toMatchObject({ event: 'accepted', run, title: 'Mean pressure' });
    expect(events.filter(({ event }) => event.event === 'round')).toHaveLength(TOY_ROUNDS);
    expect(events.at(-1)?.event).toMatchObject({ event: 'outcome', outcome: 'solved' });
    expect(await follow(run, 2)).toEqual(events.slice(2));

    const { runs } = (await (await call('/v1/runs')).json()) as { runs: unknown[] };
    expect(runs).toMatchObject([{ run, state: 'ended', outcome: 'solved', round: TOY_ROUNDS }]);
    const result = await (await call(`/v1/runs/${run}/result`)).text();
    expect(result).toBe(await readFile(join(state, 'runs', run, 'result.json'), 'utf8'));
    expect(result).toMatch(/^\{\n {2}"format": 1,.*\}\n$/s);
    expect((await readdir(join(state, 'runs', run))).sort()).toEqual([
      'coefficients.csv',
      'journal',
      'log.jsonl',
      'result.json',
      'rounds.csv',
      'specification.yaml',
    ]);
  });

  test('a bad specification comes back with everything that is wrong with it', async () => {
    await start();
    const response = await call('/v1/runs', {
      method: 'POST',
      headers: { 'content-type': 'application/json' },
      body: JSON.stringify({ specification: 'commonfit: 1\nloss: guess\n', file: 'bad.fit.yaml' }),
    });
    expect(response.status).toBe(422);
    expect(response.headers.get('content-type')).toMatch(/^application\/problem\+json/);
    const problem = (await response.json()) as { code: string; failures: { where: { file: string } }[] };
    expect(problem.failures.length).toBeGreaterThan(1);
    expect(problem.failures[0].where.file).toBe('bad.fit.yaml');
  });

  test('cancel ends a run', async () => {
    await start();
    const run = await submit();
    expect((await call(`/v1/runs/${run}/cancel`, { method: 'POST' })).status).toBe(202);
    expect((await follow(run)).at(-1)?.event).toMatchObject({ outcome: 'cancelled' });
    expect((await call(`/v1/runs/${run}/result`)).status).toBe(200);
  });

  test.each([
    ['/v1/runs', {}, 401, 'unauthorised'],
    ['/v1/openapi.json', { authorization: 'Bearer wrong' }, 401, 'unauthorised'],
  ])('%s without a token is refused', async (path, headers, status, code) => {
    const address = await start();
    const response = await fetch(`${address}${path}`, { headers });
    expect(response.status).toBe(status);
    expect(response.headers.get('www-authenticate')).toBe('Bearer');
    expect(await response.json()).toMatchObject({ status, code });
  });

  test("a site's token is none of an analyst", async () => {
    const address = await start();
    const headers = { authorization: `Bearer ${await siteToken('harrowmere')}` };
    expect((await fetch(`${address}/v1/sites`, { headers })).status).toBe(401);
  });

  test('what is not there, not JSON or too large is a problem with a code', async () => {
    await start();
    const post = (body: string) =>
      call('/v1/runs', { method: 'POST', headers: { 'content-type': 'application/json' }, body });
    const answers = [
      [await call('/v1/runs/none'), 404, 'not-found'],
      [await call('/nowhere'), 404, 'not-found'],
      [await post('{'), 400, 'field-value'],
      [await post('{"specification": 1}'), 400, 'field-value'],
      [await post('x'.repeat(7_000_000)), 413, 'frame-too-large'],
    ] as const;
    for (const [response, status, code] of answers) {
      expect(response.status).toBe(status);
      expect(await response.json()).toMatchObject({ code });
    }
  });

  test('health is open to all, and the OpenAPI document names every route', async () => {
    const address = await start();
    expect((await fetch(`${address}/health/live`)).status).toBe(200);
    expect((await fetch(`${address}/health/ready`)).status).toBe(200);
    const document = (await (await call('/v1/openapi.json')).json()) as { paths: Record<string, unknown> };
    expect(Object.keys(document.paths).sort()).toEqual([
      '/health/live',
      '/health/ready',
      '/v1/runs',
      '/v1/runs/{run}',
      '/v1/runs/{run}/cancel',
      '/v1/runs/{run}/log',
      '/v1/runs/{run}/result',
      '/v1/sites',
    ]);
  });
});

describe('workers that do not keep to the protocol', () => {
  test.each([['wrong'], ['']])('token "%s" is refused before the upgrade', async (token) => {
    const address = await start();
    const refused = await ToySocket.open(address, token);
    expect(refused).toMatchObject({ status: 401, type: 'application/problem+json' });
    expect('body' in refused && JSON.parse(refused.body)).toMatchObject({ code: 'token-refused' });
    await expectRunSolved(address);
  });

  test('an analyst is no site, and another subprotocol is none of ours', async () => {
    const address = await start();
    expect(await ToySocket.open(address, await analystToken())).toMatchObject({ status: 401 });
    const token = await siteToken('harrowmere');
    expect(await ToySocket.open(address, token, 'commonfit.v99')).toMatchObject({ status: 426 });
  });

  test('more workers than there is room for', async () => {
    const address = await start({ linksMost: 1 });
    await socketOf(address, 'harrowmere');
    expect(await ToySocket.open(address, await siteToken('castlefen'))).toMatchObject({ status: 503 });
  });

  test.each<[string, (socket: ToySocket) => void, number]>([
    ['a hello of another site', (socket) => socket.send(helloOf('oakhythe')), CLOSE_CODES.tokenRefused],
    [
      'another version',
      (socket) => socket.send({ ...helloOf('harrowmere'), version: 2 } as never),
      CLOSE_CODES.versionUnsupported,
    ],
    [
      'an answer before hello',
      (socket) =>
        socket.send({
          kind: 'answer',
          run: 'r',
          ask: 1,
          work: [{ work: 'factor', factor: Float64Array.of(1) }],
        }),
      CLOSE_CODES.messageUnexpected,
    ],
    [
      'a shard that cannot be',
      (socket) => socket.send({ ...helloOf('harrowmere'), shard: { index: 3, of: 2 } }),
      CLOSE_CODES.messageUnexpected,
    ],
    ['garbage', (socket) => socket.socket.send(Buffer.from([0xff, 1, 2])), CLOSE_CODES.frameMalformed],
    ['a text frame', (socket) => socket.socket.send('hello'), CLOSE_CODES.frameMalformed],
    [
      'a frame over the limit',
      (socket) => socket.socket.send(Buffer.alloc(LIMITS.frameBytesMost + 1)),
      CLOSE_CODES.frameTooLarge,
    ],
  ])('%s closes the link with its code, and the service goes on', async (_, misbehave, code) => {
    const address = await start();
    const socket = await socketOf(address, 'harrowmere');
    misbehave(socket);
    expect(await socket.closed).toBe(code);
    await expectRunSolved(address);
  });

  test('of two links of one member the newer wins', async () => {
    const address = await start();
    const token = await siteToken('harrowmere');
    const older = await toySite(address, token, 'harrowmere', 1);
    const newer = await toySite(address, token, 'harrowmere', MEANS.harrowmere);
    expect(await older.closed).toBe(CLOSE_CODES.replaced);
    await toySite(address, await siteToken('castlefen'), 'castlefen', MEANS.castlefen);
    expect((await follow(await submit())).at(-1)?.event).toMatchObject({ outcome: 'solved' });
    expect(newer.received[0]).toMatchObject({ kind: 'welcome' });
  });

  const spoil = (change: (gradient: Float64Array) => Float64Array) => (ask: Ask) => {
    const answer = toyAnswer(ask, MEANS.castlefen);
    const [work] = answer.work;
    if (work.work === 'evaluate')
      work.points[0].gradient = change(work.points[0].gradient ?? new Float64Array());
    return answer;
  };

  test.each<[string, (ask: Ask) => Answer, number]>([
    ['a vector of the wrong length', spoil(() => Float64Array.of(1, 2)), CLOSE_CODES.messageUnexpected],
    ['NaN', spoil(() => Float64Array.of(Number.NaN)), CLOSE_CODES.frameMalformed],
    [
      'another kind of answer',
      (ask) => ({ ...toyAnswer(ask, 0), work: [{ work: 'factor', factor: Float64Array.of(1) }] }),
      CLOSE_CODES.messageUnexpected,
    ],
  ])('%s closes the link; the run waits for an honest answer', async (_, reply, code) => {
    const address = await start();
    const token = await siteToken('castlefen');
    await toySite(address, await siteToken('harrowmere'), 'harrowmere', MEANS.harrowmere);
    const liar = await ToySocket.open(address, token);
    if (!(liar instanceof ToySocket)) throw new Error('refused');
    liar.answerWith(reply);
    liar.send(helloOf('castlefen'));
    const run = await submit();
    expect(await liar.closed).toBe(code);
    await toySite(address, token, 'castlefen', MEANS.castlefen);
    const events = (await follow(run)).map(({ event }) => event);
    expect(events.at(-1)).toMatchObject({ outcome: 'solved' });
    const rounds = events.filter((event) => event.event === 'round');
    expect(rounds.at(-1)?.objective).toBeCloseTo(0.45 * (1 - 0.3 ** TOY_ROUNDS), 12);
  });

  test('answers nobody asked for are dropped and the link stays', async () => {
    const address = await start();
    const [harrowmere] = await connectBoth(address);
    const unasked = { kind: 'answer', work: [{ work: 'factor', factor: Float64Array.of(1) }] } as const;
    harrowmere.send({ ...unasked, work: [...unasked.work], run: 'none', ask: 1 });
    const run = await submit();
    harrowmere.send({ ...unasked, work: [...unasked.work], run, ask: 99 });
    expect((await follow(run)).at(-1)?.event).toMatchObject({ outcome: 'solved' });
    expect(harrowmere.socket.readyState).toBe(harrowmere.socket.OPEN);
  });
});

describe('stopping and starting', () => {
  test('a run under way goes on after a restart, to the same result', async () => {
    await expectRunSolved(await start());
    const { runs } = (await (await call('/v1/runs')).json()) as { runs: { run: string }[] };
    const expected = await (await call(`/v1/runs/${runs[0].run}/result`)).text();

    const run = await submit();
    await follow(run);
    const stopped = await submit(SPECIFICATION.replace('castlefen]', 'castlefen, lindell-bay]'));
    await service?.close();
    await start();
    expect(await (await call(`/v1/runs/${run}/result`)).text()).toBe(expected);
    expect(await (await call(`/v1/runs/${stopped}`)).json()).toMatchObject({ state: 'waiting' });
  });

  test('stopped in the middle of a round, the run is taken up from its journal', async () => {
    const address = await start();
    const token = await siteToken('castlefen');
    await toySite(address, await siteToken('harrowmere'), 'harrowmere', MEANS.harrowmere);
    const slow = await ToySocket.open(address, token);
    if (!(slow instanceof ToySocket)) throw new Error('refused');
    const reached = new Promise<void>((resolve) => {
      slow.answerWith((ask) => {
        if (ask.ask < 3) return toyAnswer(ask, MEANS.castlefen);
        resolve();
        return null;
      });
    });
    slow.send(helloOf('castlefen'));
    const run = await submit();
    await reached;
    await service?.close();
    expect(await slow.closed).toBe(CLOSE_CODES.goingAway);

    await connectBoth(await start());
    const events = (await follow(run)).map(({ event }) => event);
    expect(events.filter(({ event }) => event === 'resumed')).toMatchObject([{ round: 2 }]);
    const rounds = events.filter((event) => event.event === 'round');
    expect(rounds.map(({ round }) => round)).toEqual([1, 2, 3]);
    expect(rounds.at(-1)?.objective).toBeCloseTo(0.45 * (1 - 0.3 ** TOY_ROUNDS), 12);
  });

  test('more runs than may wait are refused', async () => {
    await start({ waitingMost: 1 });
    await submit();
    const response = await call('/v1/runs', {
      method: 'POST',
      headers: { 'content-type': 'application/json' },
      body: JSON.stringify({ specification: SPECIFICATION, file: 'x.fit.yaml' }),
    });
    expect(response.status).toBe(503);
    expect(await response.json()).toMatchObject({ code: 'coordinator-full' });
  });

  test('one run at a time: the second starts when the first has ended', async () => {
    const address = await start({ runningMost: 1 });
    const first = await submit();
    const second = await submit();
    await connectBoth(address);
    expect((await follow(first)).at(-1)?.event).toMatchObject({ outcome: 'solved' });
    expect((await follow(second)).at(-1)?.event).toMatchObject({ outcome: 'solved' });
  });

  test('a port in use, plain text off loopback, and half a certificate are refused', async () => {
    const other = createServer();
    const port = await new Promise<number>((resolve) => {
      other.listen(0, '127.0.0.1', () => {
        const address = other.address();
        resolve(typeof address === 'object' && address !== null ? address.port : 0);
      });
    });
    const options = { state, port, logLevel: 'silent' } as const;
    expect(await startService(options, { fit: toyRun })).toMatchObject({ failure: { code: 'port-in-use' } });
    other.close();
    const refused = { ok: false, failure: { code: 'field-conflict' } };
    expect(await startService({ ...options, host: '0.0.0.0' }, { fit: toyRun })).toMatchObject(refused);
    expect(await startService({ ...options, keyFile: 'key.pem' }, { fit: toyRun })).toMatchObject(refused);
  });

  test("the analyst's token is made once and is for its owner only", async () => {
    await start();
    const token = await analystToken();
    expect((await stat(join(state, 'analyst.token'))).mode & 0o777).toBe(0o600);
    await service?.close();
    await start();
    expect(await analystToken()).toBe(token);
  });
});
