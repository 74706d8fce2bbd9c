import { mkdtemp, readFile, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { setTimeout as delay } from 'node:timers/promises';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import { fit } from '../../coordinator/run/fit.js';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import { type Service, startService } from '../../coordinator/service/service.js';
import { openTokens } from '../../coordinator/service/tokens.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { connectLink } from '../../protocol/link/websocket.js';
import type { Pulse } from '../../protocol/link/websocket-link.js';
import { keepConnected } from '../../worker/service/connection.js';
import type { WorkerEvent } from '../../worker/service/events.js';
import { until } from '../support/processes.js';
import { SlowLink } from '../support/slow-link.js';
import { helloOf } from '../support/toy-site.js';
import { siteInMemory } from '../support/worker-site.js';

/** Connections whose other end is gone without a word; coordinator and workers in this process, with a quick pulse. */
const QUICK: Pulse = { everyMs: 50, silenceMostMs: 400 };
/** One that notices nothing while a test lasts. */
const NEVER: Pulse = { everyMs: 600_000, silenceMostMs: 6_000_000 };
/** The documented bound, and what a machine that is busy with other tests adds to it. Milliseconds. */
const BOUND_MS = QUICK.silenceMostMs + QUICK.everyMs + 3000;
const SITES = ['harrowmere', 'castlefen'] as const;
const BUSY = { timeout: 60_000 } as const;

const SPECIFICATION = [
  'commonfit: 1',
  'title: Breaks by age',
  `sites: [${SITES.join(', ')}]`,
  'response: {column: breaks}',
  'loss: poisson',
  'exposure: {column: km_years}',
  'terms: [{column: age_years}, {column: pressure_bar}]',
  'penalty: [{kind: elastic-net, lambda: 0.002, l1: 0.5}]',
  'rounds: {tolerance: 1e-8}',
  'barrier: {deadline: 1s, patience: 2m}',
].join('\n');

/** An ask in the middle of the run. */
const MIDDLE = 4;

interface Site {
  readonly link: SlowLink;
  readonly events: { readonly event: WorkerEvent; readonly atMs: number }[];
  readonly ended: Promise<unknown>;
}

let state = '';
let service: Service | null = null;
let sites = new Map<string, Site>();
let stop = new AbortController();
/** Called once, when castlefen has answered the ask in the middle. */
let inTheMiddle = (): void => undefined;

beforeEach(async () => {
  state = await mkdtemp(join(tmpdir(), 'commonfit-half-open-'));
  stop = new AbortController();
});
afterEach(async () => {
  stop.abort();
  await Promise.all([...sites.values()].map(({ link }) => link.close()));
  await Promise.all([...sites.values()].map(({ ended }) => ended));
  await service?.close();
  sites = new Map();
  service = null;
  await rm(state, { recursive: true });
});

async function start(pulses: { coordinator: Pulse; workers: Pulse }): Promise<void> {
  const options = { state, port: 0, logLevel: 'silent' } as const;
  const started = await startService(options, { fit, pulse: pulses.coordinator });
  if (!started.ok) throw new Error(started.failure.message);
  service = started.value;
  const port = Number(new URL(service.address).port);
  for (const [index, site] of SITES.entries()) {
    const link = await SlowLink.open(port, { oneWayMs: 5 }, 7 + index);
    sites.set(site, await joinAs(site, link, pulses.workers));
  }
}

async function joinAs(site: string, link: SlowLink, pulse: Pulse): Promise<Site> {
  const issued = await openTokens(state).issue({ kind: 'site', name: site });
  if (!issued.ok) throw new Error(issued.failure.message);
  const token = issued.value;
  const url = `ws://127.0.0.1:${link.port}/v1/site`;
  const events: Site['events'] = [];
  const onEvent = (event: WorkerEvent): void => {
    events.push({ event, atMs: performance.now() });
    if (site === 'castlefen' && event.event === 'answered' && event.ask === MIDDLE) inTheMiddle();
  };
  const { answerer } = await siteInMemory({ site, onEvent });
  const ended = keepConnected({
    url,
    hello: helloOf(site),
    connect: () => connectLink({ url, token, pulse }),
    answerer,
    timers: { wait: (ms, signal) => delay(ms, undefined, { signal }).catch(() => undefined) },
    random: () => 0.1,
    onEvent,
    stop: stop.signal,
    graceMs: 0,
    once: false,
  });
  return { link, events, ended };
}

const siteOf = (name: (typeof SITES)[number]): Site => {
  const site = sites.get(name);
  if (site === undefined) throw new Error(`${name} was not started`);
  return site;
};

async function submit(): Promise<string> {
  const token = (await readFile(join(state, 'analyst.token'), 'utf8')).trim();
  const response = await fetch(`${service?.address}/v1/runs`, {
    method: 'POST',
    headers: { 'content-type': 'application/json', authorization: `Bearer ${token}` },
    body: JSON.stringify({ specification: SPECIFICATION, file: 'breaks.fit.yaml' }),
  });
  expect(response.status).toBe(201);
  return ((await response.json()) as { run: string }).run;
}

async function logOf(run: string): Promise<LogEvent[]> {
  const text = await readFile(join(state, 'runs', run, 'log.jsonl'), 'utf8');
  const whole = text.slice(0, text.lastIndexOf('\n') + 1);
  return whole
    .split('\n')
    .filter((line) => line !== '')
    .map((line) => JSON.parse(line) as LogEvent);
}

const changesOf = async (run: string, site: string): Promise<string[]> =>
  (await logOf(run)).flatMap((event) =>
    event.event === 'site' && event.site === site ? [event.change] : [],
  );

async function resultOf(run: string): Promise<string> {
  await until('the outcome', async () => (await logOf(run)).some(({ event }) => event === 'outcome'));
  return readFile(join(state, 'runs', run, 'result.json'), 'utf8');
}

/** A run in whose middle `happens`. */
async function submitAnd(happens: () => void): Promise<string> {
  const middle = new Promise<void>((resolve) => {
    inTheMiddle = () => {
      inTheMiddle = () => undefined;
      happens();
      resolve();
    };
  });
  const run = await submit();
  await middle;
  return run;
}

const disconnected = ({ events }: Site) => events.find(({ event }) => event.event === 'disconnected');

/** A run whose one site falls silent in its middle, after one that nothing disturbed. */
async function silencedRun(pulses: { coordinator: Pulse; workers: Pulse }) {
  await start(pulses);
  const undisturbed = await resultOf(await submit());
  expect(JSON.parse(undisturbed)).toMatchObject({ outcome: 'solved' });
  const run = await submitAnd(() => siteOf('castlefen').link.silence());
  return { run, undisturbed, silentSinceMs: performance.now() };
}

describe('a connection that carries nothing any more and looks open at both ends', BUSY, () => {
  test('is given up by the worker in time, who makes a new one; the result is the same', async () => {
    const { run, undisturbed, silentSinceMs } = await silencedRun({ coordinator: NEVER, workers: QUICK });
    const site = siteOf('castlefen');
    const { event, atMs } = await until('the worker to notice', () => disconnected(site));
    expect(event).toMatchObject({ closeCode: CLOSE_CODES.tooSlow, reason: 'nothing heard for 0.4 seconds' });
    expect(atMs - silentSinceMs).toBeLessThan(BOUND_MS);
    expect(await resultOf(run)).toBe(undisturbed);
    expect(await changesOf(run, 'castlefen')).toEqual(['lost', 'connected']);
  });

  test('is given up by the coordinator in time; the worker comes back, the result is the same', async () => {
    const { run, undisturbed, silentSinceMs } = await silencedRun({ coordinator: QUICK, workers: NEVER });
    const site = siteOf('castlefen');
    await until('the coordinator to notice', async () =>
      (await changesOf(run, 'castlefen')).includes('lost'),
    );
    expect(performance.now() - silentSinceMs).toBeLessThan(BOUND_MS);
    expect(disconnected(site)).toBeUndefined();
    site.link.forgetSilent();
    expect(await resultOf(run)).toBe(undisturbed);
    expect(await changesOf(run, 'castlefen')).toEqual(['lost', 'connected']);
    expect(disconnected(site)?.event).toMatchObject({ closeCode: CLOSE_CODES.connectionLost });
  });

  test('is given up by both, whoever is first, and the member counts once', async () => {
    const { run, undisturbed } = await silencedRun({ coordinator: QUICK, workers: QUICK });
    expect(await resultOf(run)).toBe(undisturbed);
    expect(await changesOf(run, 'castlefen')).toEqual(['lost', 'connected']);
    await until('the end of the silent link', () => disconnected(siteOf('castlefen')));
    expect(siteOf('castlefen').link.connections).toBe(2);
  });
});

describe('a partition longer than silence may last', BUSY, () => {
  test('breaks the links at both ends; after it the run goes on to the same result', async () => {
    await start({ coordinator: QUICK, workers: QUICK });
    const undisturbed = await resultOf(await submit());
    const run = await submitAnd(() => {
      for (const { link } of sites.values()) link.partition();
    });
    for (const site of SITES)
      await until(`${site} to be missed`, async () => (await changesOf(run, site)).includes('lost'));
    await until('a try during the partition', () => siteOf('castlefen').link.connections > 1);
    for (const { link } of sites.values()) link.heal();
    expect(await resultOf(run)).toBe(undisturbed);
    for (const site of SITES) expect((await changesOf(run, site)).at(-1)).toBe('connected');
  });
});

describe('a line on which one message takes longer than silence may last', BUSY, () => {
  test('keeps its links: the bytes that trickle in are a sign of life', async () => {
    await start({ coordinator: QUICK, workers: QUICK });
    const undisturbed = await resultOf(await submit());
    for (const { link } of sites.values()) link.setLine({ bytesPerSecond: 1500, segmentBytes: 100 });
    expect(await resultOf(await submit())).toBe(undisturbed);
    for (const site of SITES) expect(disconnected(siteOf(site))).toBeUndefined();
  });
});
