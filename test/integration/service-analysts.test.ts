import { mkdir, readdir, readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import {
  bench,
  call,
  connectBoth,
  follow,
  SPECIFICATION,
  siteToken,
  start,
  submit,
} from '../support/service-bench.js';
import { TOY_ROUNDS } from '../support/toy-run.js';

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
    expect(result).toBe(await readFile(join(bench.state, 'runs', run, 'result.json'), 'utf8'));
    expect(result).toMatch(/^\{\n {2}"format": 1,.*\}\n$/s);
    expect((await readdir(join(bench.state, 'runs', run))).sort()).toEqual([
      'coefficients.csv',
      'journal',
      'log.jsonl',
      'report.html',
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

  test('a start from a run that is not there, has not ended or has no coefficients is refused', async () => {
    const address = await start();
    const run = await submit();
    const startFrom = (from: unknown) =>
      call('/v1/runs', {
        method: 'POST',
        headers: { 'content-type': 'application/json' },
        body: JSON.stringify({ specification: SPECIFICATION, file: 'pressure.fit.yaml', startFrom: from }),
      });
    for (const from of ['none', '../../x', run]) {
      const response = await startFrom(from);
      expect(response.status).toBe(404);
      expect(await response.json()).toMatchObject({ code: 'not-found' });
    }
    expect((await startFrom({})).status).toBe(400);
    await connectBoth(address);
    await follow(run);
    const refused = await startFrom(run);
    expect(refused.status).toBe(422);
    expect(await refused.json()).toMatchObject({
      title: 'The start is refused',
      code: 'field-value',
      detail: `Run ${run} has no coefficients to start from.`,
    });
    expect(((await (await call('/v1/runs')).json()) as { runs: unknown[] }).runs).toHaveLength(1);
  });

  test('cancel ends a run', async () => {
    await start();
    const run = await submit();
    expect((await call(`/v1/runs/${run}/cancel`, { method: 'POST' })).status).toBe(202);
    expect((await follow(run)).at(-1)?.event).toMatchObject({ outcome: 'cancelled' });
    expect((await call(`/v1/runs/${run}/result`)).status).toBe(200);
  });

  test('a cancellation that cannot be kept is refused, and the run goes on', async () => {
    const address = await start();
    const run = await submit();
    await mkdir(join(bench.state, 'runs', run, 'cancelled'));
    const response = await call(`/v1/runs/${run}/cancel`, { method: 'POST' });
    expect(response.status).toBe(503);
    expect(await response.json()).toMatchObject({ code: 'state-unwritable' });
    await connectBoth(address);
    expect((await follow(run)).at(-1)?.event).toMatchObject({ outcome: 'solved' });
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
      '/metrics',
      '/v1/runs',
      '/v1/runs/{run}',
      '/v1/runs/{run}/cancel',
      '/v1/runs/{run}/log',
      '/v1/runs/{run}/result',
      '/v1/runs/{run}/specification',
      '/v1/sites',
    ]);
  });
});
