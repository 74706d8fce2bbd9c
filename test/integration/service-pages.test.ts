import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import { reportCommand } from '../../coordinator/commands/report.js';
import { openTokens } from '../../coordinator/service/tokens.js';
import { analystToken, bench, call, connectBoth, follow, start, submit } from '../support/service-bench.js';

const HTML = { accept: 'text/html' };

const get = (path: string, headers: Record<string, string> = {}): Promise<Response> =>
  fetch(`${bench.service?.address}${path}`, { headers: { ...HTML, ...headers }, redirect: 'manual' });

const post = (
  path: string,
  form: Record<string, string>,
  headers: Record<string, string> = {},
): Promise<Response> =>
  fetch(`${bench.service?.address}${path}`, {
    method: 'POST',
    headers: { ...HTML, ...headers },
    body: new URLSearchParams(form),
    redirect: 'manual',
  });

async function signIn(token: string): Promise<string> {
  const response = await post('/sign-in', { token, to: '/' });
  expect(response.status).toBe(303);
  return (response.headers.get('set-cookie') ?? '').split(';')[0];
}

describe('signing in', () => {
  test('a session is a cookie that no script reads and no other site sends', async () => {
    await start();
    const response = await post('/sign-in', {
      token: await analystToken(),
      to: '/runs/20310504-101500-4f6c2a91',
    });
    expect(response.status).toBe(303);
    expect(response.headers.get('location')).toBe('/runs/20310504-101500-4f6c2a91');
    const cookie = response.headers.get('set-cookie') ?? '';
    expect(cookie).toMatch(
      /^commonfit-session=[\w-]{43}; Path=\/; Max-Age=43200; HttpOnly; SameSite=Strict$/,
    );
    expect(cookie).not.toContain(await analystToken());
  });

  test('without a session a browser is sent to the form, a program told the problem', async () => {
    await start();
    const page = await get('/runs/20310504-101500-4f6c2a91');
    expect([page.status, page.headers.get('location')]).toEqual([
      303,
      '/sign-in?to=%2Fruns%2F20310504-101500-4f6c2a91',
    ]);
    expect((await get('/', { accept: 'application/json' })).status).toBe(401);
  });

  test('a token that is none, or a site’s, opens nothing', async () => {
    await start();
    const site = await openTokens(bench.state).issue({ kind: 'site', name: 'castlefen' });
    for (const token of ['wrong', '', site.ok ? site.value : '']) {
      const response = await post('/sign-in', { token, to: '/' });
      expect(response.status).toBe(401);
      expect(response.headers.get('set-cookie')).toBeNull();
    }
  });

  test('it leads on to pages of ours only, and takes no form of another site', async () => {
    await start();
    const token = await analystToken();
    for (const to of ['https://elsewhere.example/', '//elsewhere.example', '/v1/runs', '/runs/../x']) {
      expect((await post('/sign-in', { token, to })).headers.get('location')).toBe('/');
    }
    const foreign = await post('/sign-in', { token, to: '/' }, { 'sec-fetch-site': 'cross-site' });
    expect([foreign.status, foreign.headers.get('set-cookie')]).toEqual([403, null]);
  });

  test('a session looks and changes nothing: no run is submitted or cancelled with it', async () => {
    await start();
    const cookie = await signIn(await analystToken());
    const run = await submit();
    expect((await get(`/runs/${run}`, { cookie })).status).toBe(200);
    expect((await post(`/v1/runs/${run}/cancel`, {}, { cookie })).status).toBe(401);
    expect((await get('/v1/runs', { cookie })).status).toBe(401);
  });

  test('it ends when one signs out, and when the token is revoked', async () => {
    await start();
    const tokens = openTokens(bench.state);
    const issued = await tokens.issue({ kind: 'analyst', name: 'nell' }, { lastsMs: null, may: 'watch' });
    if (!issued.ok) throw new Error(issued.failure.message);
    const [first, second] = [await signIn(issued.value), await signIn(issued.value)];
    expect((await get('/', { cookie: first })).status).toBe(200);
    await post('/sign-out', {}, { cookie: first });
    expect((await get('/', { cookie: first })).status).toBe(303);
    expect((await get('/', { cookie: second })).status).toBe(200);
    await tokens.revoke({ kind: 'analyst', name: 'nell' });
    expect((await get('/', { cookie: second })).status).toBe(303);
  });
});

describe('pages', () => {
  test('the report is in the run’s folder and served with a policy that lets nothing else in', async () => {
    const address = await start();
    const run = await submit();
    expect((await call(`/runs/${run}/report`)).status).toBe(409);
    await connectBoth(address);
    await follow(run);
    const response = await call(`/runs/${run}/report`);
    expect(response.status).toBe(200);
    const page = await response.text();
    expect(page).toBe(await readFile(join(bench.state, 'runs', run, 'report.html'), 'utf8'));
    expect(page).toContain(run);
    expect(page).toMatch(/Journal, SHA-256<\/dt><dd><code>[0-9a-f]{64}</);
    expect(response.headers.get('content-security-policy')).toMatch(
      /^default-src 'none'; .*frame-ancestors 'none'$/,
    );
    expect(response.headers.get('referrer-policy')).toBe('no-referrer');
    expect(response.headers.get('x-content-type-options')).toBe('nosniff');
    expect(response.headers.get('cache-control')).toBe('no-store');
  });

  test('the command saves the same report', async () => {
    const address = await start();
    const run = await submit();
    await connectBoth(address);
    await follow(run);
    const file = join(bench.state, 'breaks.html');
    const place = ['--url', address, '--token-file', join(bench.state, 'analyst.token')];
    await reportCommand().parseAsync([run, '--out', file, '--json', ...place], { from: 'user' });
    expect(process.exitCode).toBe(0);
    expect(await readFile(file, 'utf8')).toBe(await (await call(`/runs/${run}/report`)).text());
  });

  test('a run that is not there is a page for a browser and a problem for a program', async () => {
    await start();
    const cookie = await signIn(await analystToken());
    const page = await get('/runs/none', { cookie });
    expect([page.status, page.headers.get('content-type')]).toEqual([404, 'text/html; charset=utf-8']);
    const problem = await call('/runs/none/report');
    expect(problem.status).toBe(404);
    expect(problem.headers.get('content-type')).toMatch(/^application\/problem\+json/);
  });
});
