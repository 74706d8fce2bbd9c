import { mkdtemp, readFile, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, expect } from 'vitest';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import { type Service, startService } from '../../coordinator/service/service.js';
import type { ServiceOptions } from '../../coordinator/service/settings.js';
import { openTokens } from '../../coordinator/service/tokens.js';
import { toyRun } from './toy-run.js';
import { ToySocket, toySite } from './toy-site.js';

export const SPECIFICATION = [
  'commonfit: 1',
  'title: Mean pressure',
  'sites: [harrowmere, castlefen]',
  'response: {column: pressure_bar}',
  'loss: squared',
  'terms: [{column: age_years}]',
  'barrier: {deadline: 1s, patience: 30s}',
].join('\n');
export const MEANS = { harrowmere: 3.1, castlefen: -2.2 };

/** The state folder and the service of the test that runs; both go with it. */
export const bench: { state: string; service: Service | null } = { state: '', service: null };

beforeEach(async () => {
  bench.state = await mkdtemp(join(tmpdir(), 'commonfit-service-'));
});
afterEach(async () => {
  await bench.service?.close();
  bench.service = null;
  await rm(bench.state, { recursive: true });
});

export async function start(more: Partial<ServiceOptions> = {}): Promise<string> {
  const started = await startService(
    { state: bench.state, port: 0, logLevel: 'silent', ...more },
    { fit: toyRun },
  );
  if (!started.ok) throw new Error(started.failure.message);
  bench.service = started.value;
  return started.value.address;
}

export const analystToken = async (): Promise<string> =>
  (await readFile(join(bench.state, 'analyst.token'), 'utf8')).trim();

export async function siteToken(name: string): Promise<string> {
  const token = await openTokens(bench.state).issue({ kind: 'site', name });
  if (!token.ok) throw new Error(token.failure.message);
  return token.value;
}

export async function call(path: string, init: RequestInit = {}): Promise<Response> {
  const headers = { authorization: `Bearer ${await analystToken()}`, ...init.headers };
  return fetch(`${bench.service?.address}${path}`, { ...init, headers });
}

export async function submit(specification = SPECIFICATION): Promise<string> {
  const response = await call('/v1/runs', {
    method: 'POST',
    headers: { 'content-type': 'application/json' },
    body: JSON.stringify({ specification, file: 'pressure.fit.yaml' }),
  });
  expect(response.status).toBe(201);
  return ((await response.json()) as { run: string }).run;
}

/** The events of the log from after `lastId` to the outcome. */
export async function follow(run: string, lastId?: number): Promise<{ id: number; event: LogEvent }[]> {
  const headers: Record<string, string> = lastId === undefined ? {} : { 'last-event-id': String(lastId) };
  const text = await (await call(`/v1/runs/${run}/log`, { headers })).text();
  return [...text.matchAll(/^id: (\d+)\ndata: (.*)\n\n/gm)].map(([, id, data]) => ({
    id: Number(id),
    event: JSON.parse(data),
  }));
}

export async function socketOf(address: string, site: string): Promise<ToySocket> {
  const opened = await ToySocket.open(address, await siteToken(site));
  if (!(opened instanceof ToySocket)) throw new Error(`refused with ${opened.status}`);
  return opened;
}

export const connectBoth = async (address: string): Promise<ToySocket[]> =>
  Promise.all(
    Object.entries(MEANS).map(async ([site, mean]) => toySite(address, await siteToken(site), site, mean)),
  );

/** A run on the same coordinator goes to its end: whatever came before did it no harm. */
export async function expectRunSolved(address: string): Promise<void> {
  await connectBoth(address);
  const run = await submit();
  expect((await follow(run)).at(-1)?.event).toMatchObject({ event: 'outcome', outcome: 'solved' });
}
