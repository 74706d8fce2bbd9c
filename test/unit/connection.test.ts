import { describe, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Link } from '../../protocol/link/link.js';
import { memoryLinks } from '../../protocol/link/memory.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { BACKOFF, backoffMs } from '../../worker/service/backoff.js';
import {
  type ConnectionDeps,
  type CoordinatorLink,
  keepConnected,
  type Timers,
} from '../../worker/service/connection.js';
import type { WorkerEvent } from '../../worker/service/events.js';
import { hello, welcome } from '../support/messages.js';
import { askOf, prepareOf, SITE, siteInMemory } from '../support/worker-site.js';

const gradientAsk = (ask: number) =>
  askOf('r1', ask, {
    work: 'evaluate',
    problem: 0,
    part: null,
    points: [{ point: Float64Array.of(-1, 0, 0), want: 'gradient' }],
    ownFit: null,
    sketch: null,
  });

/** Time that stands still until it is told to pass. */
class FakeTimers implements Timers {
  readonly waits: { ms: number; pass: () => void }[] = [];

  wait(ms: number, signal: AbortSignal): Promise<void> {
    if (signal.aborted) return Promise.resolve();
    return new Promise((resolve) => {
      const wait = { ms, pass: () => this.#end(wait, resolve) };
      this.waits.push(wait);
      signal.addEventListener('abort', wait.pass, { once: true });
    });
  }

  /** Lets the wait of that length pass. */
  pass(ms: number): void {
    const wait = this.waits.find((candidate) => candidate.ms === ms);
    if (wait === undefined) throw new Error(`nothing waits ${ms} ms: ${this.waits.map((w) => w.ms)}`);
    wait.pass();
  }

  #end(wait: { ms: number; pass: () => void }, resolve: () => void): void {
    const at = this.waits.indexOf(wait);
    if (at >= 0) this.waits.splice(at, 1);
    resolve();
  }
}

const settle = async (): Promise<void> => {
  for (let turn = 0; turn < 3; turn++) await new Promise((resolve) => setImmediate(resolve));
};

type FarEnd = Link<ToWorker, ToCoordinator> & { readonly received: ToCoordinator[] };

/** A worker and the coordinator's end of each link it makes. */
async function worker(more: Partial<ConnectionDeps> & { pause?: () => Promise<void> } = {}) {
  const site = await siteInMemory(more.pause === undefined ? {} : { pause: more.pause });
  const timers = new FakeTimers();
  const stop = new AbortController();
  const links: FarEnd[] = [];
  const events: WorkerEvent[] = [];
  const connect = async (): Promise<Checked<CoordinatorLink>> => {
    const pair = memoryLinks((run) => queueMicrotask(run));
    const received: ToCoordinator[] = [];
    pair.coordinator.onMessage((message) => received.push(message));
    links.push(Object.assign(pair.coordinator, { received }));
    return succeed(pair.worker);
  };
  const ended = keepConnected({
    url: 'ws://127.0.0.1:7443',
    hello: { ...hello, site: SITE, shard: { index: 1, of: 1 } },
    connect,
    answerer: site.answerer,
    timers,
    random: () => 0.5,
    onEvent: (event) => events.push(event),
    stop: stop.signal,
    graceMs: 5000,
    once: false,
    ...more,
  });
  await settle();
  return { ended, timers, stop, links, events, site };
}

type Made = Awaited<ReturnType<typeof worker>>;

const retriesIn = (events: readonly WorkerEvent[]): number[] =>
  events.flatMap((event) => (event.event === 'disconnected' ? [event.retryMs] : []));

const kindsOf = (end: FarEnd): string[] => end.received.map(({ kind }) => kind);

describe('waiting before the next try', () => {
  test('doubles from half a second to half a minute, and the chance covers all of it', () => {
    expect([1, 2, 3, 4].map((attempt) => backoffMs(attempt, 1))).toEqual([500, 1000, 2000, 4000]);
    expect(backoffMs(7, 1)).toBe(30_000);
    expect(backoffMs(100_000, 1)).toBe(30_000);
    expect(backoffMs(7, 0)).toBe(0);
    expect(backoffMs(7, 0.25)).toBe(7500);
  });

  test('a coordinator that is away is tried ever more slowly, one that was there soon again', async () => {
    let away = true;
    const pair = memoryLinks((run) => queueMicrotask(run));
    pair.coordinator.onMessage(() => undefined);
    const { timers, events } = await worker({
      connect: async () => (away ? fail('link-lost', 'No answer.') : succeed(pair.worker)),
    });
    for (const ms of [250, 500, 1000]) {
      timers.pass(ms);
      await settle();
    }
    away = false;
    timers.pass(2000);
    await settle();
    pair.coordinator.send(welcome);
    await settle();
    timers.pass(BACKOFF.steadyMs);
    await settle();
    pair.coordinator.close(CLOSE_CODES.goingAway, 'restarting');
    await settle();
    expect(retriesIn(events)).toEqual([250, 500, 1000, 2000, 250]);
  });

  /** On the latest link: welcomed, asked, answered, asked `more`; then the coordinator closes it. */
  async function serveAndClose(made: Made, more: readonly ToWorker[], code: number): Promise<void> {
    const far = made.links[made.links.length - 1];
    for (const message of [welcome, prepareOf('r1'), gradientAsk(1), ...more]) {
      far.send(message);
      await settle();
    }
    far.close(code, 'as it is');
    await settle();
    made.timers.pass(retriesIn(made.events).at(-1) ?? Number.NaN);
    await settle();
  }

  test('a worker all of whose answers close the link comes back ever more slowly', async () => {
    const made = await worker();
    for (let link = 0; link < 4; link++) await serveAndClose(made, [], CLOSE_CODES.messageUnexpected);
    expect(retriesIn(made.events)).toEqual([250, 500, 1000, 2000]);
  });

  test('the ask sent again is no sign that the answer was taken', async () => {
    const made = await worker();
    for (let link = 0; link < 3; link++) await serveAndClose(made, [gradientAsk(1)], CLOSE_CODES.goingAway);
    expect(retriesIn(made.events)).toEqual([250, 500, 1000]);
  });

  test.each<[string, ToWorker]>([
    ['a later ask of its run', gradientAsk(2)],
    ['the end of its run', { kind: 'run-end', run: 'r1', outcome: 'solved' }],
  ])('an answer was taken where %s came: the waits begin anew', async (_, next) => {
    const made = await worker();
    await serveAndClose(made, [], CLOSE_CODES.connectionLost);
    await serveAndClose(made, [], CLOSE_CODES.connectionLost);
    await serveAndClose(made, [next], CLOSE_CODES.connectionLost);
    expect(retriesIn(made.events)).toEqual([250, 500, 250]);
  });

  test('answers taken in one run do not excuse those of another that close the link', async () => {
    const made = await worker();
    for (let link = 0; link < 3; link++)
      await serveAndClose(made, [gradientAsk(2)], CLOSE_CODES.messageUnexpected);
    expect(retriesIn(made.events)).toEqual([250, 500, 1000]);
  });

  test('a coordinator that never says welcome counts as away', async () => {
    const { timers, events, links } = await worker();
    timers.pass(10_000);
    await settle();
    expect(events).toMatchObject([{ event: 'disconnected', closeCode: CLOSE_CODES.helloLate, attempt: 1 }]);
    timers.pass(250);
    await settle();
    expect(links).toHaveLength(2);
  });
});

describe('on a link', () => {
  test('the worker says hello first and answers after welcome', async () => {
    const { links } = await worker();
    const [far] = links;
    expect(kindsOf(far)).toEqual(['hello']);
    far.send(welcome);
    far.send(prepareOf('r1'));
    far.send(gradientAsk(1));
    await settle();
    expect(far.received[1]).toMatchObject({ kind: 'answer', run: 'r1', ask: 1 });
  });

  test('an ask before welcome closes the link', async () => {
    const { links, events } = await worker();
    links[0].send(gradientAsk(1));
    await settle();
    expect(events[0]).toMatchObject({ event: 'disconnected', closeCode: CLOSE_CODES.messageUnexpected });
  });

  test('an ask repeated while it is worked on is answered once on that link', async () => {
    const { links } = await worker();
    const [far] = links;
    for (const message of [welcome, prepareOf('r1'), gradientAsk(1), gradientAsk(1)]) far.send(message);
    await settle();
    expect(kindsOf(far)).toEqual(['hello', 'answer']);
    far.send(gradientAsk(1));
    await settle();
    expect(kindsOf(far)).toEqual(['hello', 'answer', 'answer']);
    expect(far.received[2]).toEqual(far.received[1]);
  });

  test('an ask whose link was lost is answered on the next link, and counts once', async () => {
    const { links, timers, site } = await worker();
    const start = (far: FarEnd): void => {
      for (const message of [welcome, prepareOf('r1'), gradientAsk(1)]) far.send(message);
    };
    start(links[0]);
    await settle();
    links[0].close(CLOSE_CODES.goingAway, 'restarting');
    await settle();
    timers.pass(250);
    await settle();
    start(links[1]);
    await settle();
    expect(links[1].received[1]).toEqual(links[0].received[1]);
    expect(site.answerer.departed('r1').asks).toBe(1);
  });

  test('an answer too large for the coordinator becomes a refusal', async () => {
    const { links } = await worker();
    const [far] = links;
    for (const message of [{ ...welcome, frameBytesMost: 1000 }, prepareOf('r1'), gradientAsk(1)])
      far.send(message);
    await settle();
    expect(far.received[1]).toMatchObject({ kind: 'refusal', code: 'frame-too-large' });
  });
});

describe('the end', () => {
  test.each([
    [CLOSE_CODES.tokenRefused, 'token-refused'],
    [CLOSE_CODES.versionUnsupported, 'version-unsupported'],
    [CLOSE_CODES.replaced, 'site-taken'],
  ])('close code %i is for good: %s', async (closeCode, code) => {
    const { links, ended } = await worker();
    links[0].close(closeCode, 'as it is');
    expect((await ended)?.code).toBe(code);
    expect(links).toHaveLength(1);
  });

  test('a token refused at the upgrade is for good', async () => {
    const { ended } = await worker({ connect: async () => fail('token-refused', 'Refused.') });
    expect((await ended)?.code).toBe('token-refused');
  });

  test('a certificate that is not trusted is for good at first; once welcomed, a worker waits for a good one', async () => {
    const untrusted = fail('certificate-untrusted', 'It has expired.');
    const first = await worker({ connect: async () => untrusted });
    expect((await first.ended)?.code).toBe('certificate-untrusted');

    let tries = 0;
    const pair = memoryLinks((run) => queueMicrotask(run));
    pair.coordinator.onMessage(() => {});
    const later = await worker({ connect: async () => (tries++ === 0 ? succeed(pair.worker) : untrusted) });
    pair.coordinator.send(welcome);
    await settle();
    pair.coordinator.close(CLOSE_CODES.goingAway, '');
    await settle();
    later.timers.waits[0].pass();
    await settle();
    expect(later.events.at(-1)).toMatchObject({ event: 'disconnected', reason: 'It has expired.' });
    later.stop.abort();
    expect(await later.ended).toBeNull();
  });

  test('told to stop while nothing is worked on, it closes at once', async () => {
    const { links, stop, ended } = await worker();
    links[0].send(welcome);
    await settle();
    stop.abort();
    expect(await ended).toBeNull();
    await settle();
    expect(links[0].open).toBe(false);
  });

  test('told to stop while it waits for the next try, it does not try', async () => {
    const { links, stop, ended } = await worker();
    links[0].close(CLOSE_CODES.goingAway, '');
    await settle();
    stop.abort();
    expect(await ended).toBeNull();
    expect(links).toHaveLength(1);
  });

  /** A worker in the middle of an answer. */
  async function busy() {
    let release = (): void => undefined;
    const held = new Promise<void>((resolve) => {
      release = resolve;
    });
    const made = await worker({ pause: () => held });
    for (const message of [welcome, prepareOf('r1'), gradientAsk(1)]) made.links[0].send(message);
    await settle();
    return { ...made, release };
  }

  test('told to stop in the middle of an answer, it finishes that one and takes no other', async () => {
    const { links, stop, ended, release, events } = await busy();
    stop.abort();
    links[0].send(gradientAsk(2));
    await settle();
    expect(events.at(-1)).toMatchObject({ event: 'stopping', answersOpen: 1, graceMs: 5000 });
    release();
    expect(await ended).toBeNull();
    await settle();
    expect(links[0].received.slice(1)).toMatchObject([{ kind: 'answer', ask: 1 }]);
  });

  test('an answer that takes longer than the grace time is given up', async () => {
    const { links, stop, ended, timers } = await busy();
    stop.abort();
    await settle();
    timers.pass(5000);
    expect(await ended).toBeNull();
    expect(kindsOf(links[0])).toEqual(['hello']);
  });

  test('with --once it leaves after the run', async () => {
    const { links, ended, events } = await worker({ once: true });
    for (const message of [welcome, prepareOf('r1'), gradientAsk(1)]) links[0].send(message);
    await settle();
    links[0].send({ kind: 'run-end', run: 'r1', outcome: 'solved' });
    expect(await ended).toBeNull();
    expect(events.at(-1)).toMatchObject({ event: 'run-ended', outcome: 'solved', asks: 1, numbers: 4 });
  });
});
