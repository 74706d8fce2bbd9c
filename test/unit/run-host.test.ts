import { describe, expect, test } from 'vitest';
import { openJournal } from '../../coordinator/journal/journal.js';
import { type MemoryStore, memoryStore } from '../../coordinator/journal/memory-store.js';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { RunEnd } from '../../coordinator/run/run.js';
import type { LinkedMember, Notice } from '../../coordinator/service/host-parts.js';
import { loggedIn } from '../../coordinator/service/run-entry.js';
import { RunHost } from '../../coordinator/service/run-host.js';
import { fail } from '../../protocol/failure.js';
import type { Answer, Ask, Refusal } from '../../protocol/messages/round.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { TOY_ROUNDS, toyAnswer, toyRun, toySpecification } from '../support/toy-run.js';
import { VirtualTime } from '../support/virtual-time.js';

const MEANS: Record<string, number> = { harrowmere: 3.1, 'lindell-bay': 0.7, castlefen: -2.2 };
const SITES = Object.keys(MEANS);
const ACCEPTED = { run: 'r1', canonical: '{}', digest: 'd'.repeat(64) };

type Replies = (ask: Ask, site: string) => readonly (Answer | Refusal)[];
const honest: Replies = (ask, site) => [toyAnswer(ask, MEANS[site])];

/** One run host with toy sites, all in virtual time. */
class Bench {
  readonly events: LogEvent[] = [];
  readonly notices: Notice[] = [];
  readonly sent: { site: string; message: ToWorker }[] = [];
  readonly links = new Map<string, LinkedMember>();
  readonly host: RunHost;
  kept: RunEnd | null = null;
  mayStart = true;

  readonly time = new VirtualTime();

  constructor(
    readonly store: MemoryStore = memoryStore(),
    private readonly replies: Replies = honest,
    more: { logged?: readonly LogEvent[]; sites?: FitSpecification['sites']; fit?: typeof toyRun } = {},
  ) {
    const { logged = [], sites = SITES, fit = toyRun } = more;
    const specification = toySpecification(sites);
    this.host = new RunHost({
      accepted: { ...ACCEPTED, specification },
      start: (roster) => fit(specification, ACCEPTED.digest, roster),
      journal: openJournal(store),
      time: this.time,
      connected: () => [...this.links.values()],
      mayStart: () => this.mayStart,
      log: (event) => this.events.push(event),
      notice: (notice) => this.notices.push(notice),
      keepResult: async (end) => {
        this.kept = end;
        return { ok: true, value: 'folder' };
      },
      logged: loggedIn(logged),
      node: 'v20',
    });
  }

  connect(site: string, delayMs = 10): LinkedMember {
    const linked: LinkedMember = {
      member: { site, shard: { index: 1, of: 1 }, kernel: 'k' },
      send: (message) => {
        this.sent.push({ site, message });
        if (message.kind !== 'ask') return true;
        for (const reply of this.replies(message, site)) {
          this.time.after(delayMs, () => this.host.receive(linked, reply));
        }
        return true;
      },
      close: () => this.drop(site),
    };
    this.links.set(site, linked);
    this.host.connected(linked);
    return linked;
  }

  drop(site: string): void {
    const linked = this.links.get(site);
    this.links.delete(site);
    if (linked !== undefined) this.host.lost(linked);
  }

  async finish(): Promise<RunEnd> {
    await this.time.pass(60_000, () => this.host.state.state === 'ended');
    if (this.kept === null) throw new Error(`the run has not ended: ${JSON.stringify(this.host.state)}`);
    return this.kept;
  }

  named<K extends LogEvent['event']>(event: K): Extract<LogEvent, { event: K }>[] {
    return this.events.filter((one): one is Extract<LogEvent, { event: K }> => one.event === event);
  }
}

async function undisturbed(): Promise<Bench> {
  const bench = new Bench();
  void bench.host.open();
  for (const site of SITES) bench.connect(site);
  await bench.finish();
  return bench;
}

describe('run host', () => {
  test('waits for the named sites, then runs to the end and logs every round', async () => {
    const bench = new Bench();
    await bench.host.open();
    bench.connect('castlefen', 30);
    bench.connect('harrowmere');
    expect(bench.host.state).toEqual({ state: 'waiting' });
    bench.connect('lindell-bay');
    const end = await bench.finish();
    expect(end.outcome).toBe('solved');
    expect(bench.named('waiting').map(({ sites }) => sites)).toEqual([
      SITES,
      ['harrowmere', 'lindell-bay'],
      ['lindell-bay'],
    ]);
    expect(bench.named('round')).toMatchObject(
      [1, 2, 3].map((round) => ({
        round,
        roundsMost: 300,
        tookMs: 30,
        slowest: { site: 'castlefen', ms: 30 },
        numbersUp: 6,
        numbersDown: 3,
      })),
    );
    expect(bench.events.at(-1)).toMatchObject({ event: 'outcome', outcome: 'solved', folder: 'folder' });
  });

  test('prepares each connection once, before its first ask, and tells it the end', async () => {
    const bench = await undisturbed();
    const kinds = bench.sent.filter(({ site }) => site === 'harrowmere').map(({ message }) => message.kind);
    expect(kinds).toEqual(['prepare', ...Array<string>(TOY_ROUNDS).fill('ask'), 'run-end']);
  });

  test('the roster has the order of the specification, whoever connects first', async () => {
    const bench = new Bench();
    void bench.host.open();
    for (const site of [...SITES].reverse()) bench.connect(site);
    const { result } = await bench.finish();
    expect(result.sites.map(({ site }) => site)).toEqual(SITES);
    expect(result).toEqual((await undisturbed()).kept?.result);
  });

  test('duplicates, lost replies and lost links leave the result as it is, to the bit', async () => {
    const expected = (await undisturbed()).kept?.result;
    let asks = 0;
    const bench = new Bench(memoryStore(), (ask, site) => {
      asks += 1;
      if (asks % 4 === 0) return [];
      if (asks % 5 === 0) bench.time.after(1, () => bench.drop(site));
      if (asks % 5 === 0) bench.time.after(700, () => bench.connect(site));
      return [toyAnswer(ask, MEANS[site]), toyAnswer(ask, MEANS[site])];
    });
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    const end = await bench.finish();
    expect(end.result).toEqual(expected);
    expect(bench.named('late').length).toBeGreaterThan(0);
    expect(bench.named('site').map(({ change }) => change)).toContain('lost');
    expect(bench.notices.map(({ code }) => code)).toContain('answer-unasked');
  });

  test('a site that stays away ends the run as site-missing, by name', async () => {
    const bench = new Bench();
    void bench.host.open();
    bench.connect('castlefen');
    const end = await bench.finish();
    expect(end.outcome).toBe('site-missing');
    expect(end.reason).toMatch(/harrowmere, lindell-bay/);
  });

  test('a site that goes in the middle ends the run as site-missing, without a fit', async () => {
    const bench = new Bench(memoryStore(), (ask, site) =>
      ask.ask === 2 && site === 'castlefen' ? [] : honest(ask, site),
    );
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    const end = await bench.finish();
    expect(end).toMatchObject({ outcome: 'site-missing', result: { fits: [], rounds: 1 } });
    expect(end.reason).toMatch(/ castlefen\.$/);
    expect(bench.named('late')).toHaveLength(4);
  });

  test('a refusal reaches the run', async () => {
    const bench = new Bench(memoryStore(), (ask, site) =>
      site === 'castlefen'
        ? [{ kind: 'refusal', run: ask.run, ask: ask.ask, code: 'policy-rows', message: '', remedy: null }]
        : honest(ask, site),
    );
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    expect(await bench.finish()).toMatchObject({
      outcome: 'refused',
      reason: 'castlefen refused: policy-rows',
    });
  });

  test('a vector of the wrong length closes the link and counts for nothing', async () => {
    let wrong = true;
    const bench = new Bench(memoryStore(), (ask, site) => {
      const answer = toyAnswer(ask, MEANS[site]);
      const [work] = answer.work;
      if (site === 'castlefen' && wrong && work.work === 'evaluate') {
        wrong = false;
        work.points[0].gradient = Float64Array.of(1, 2);
        bench.time.after(500, () => bench.connect(site));
      }
      return [answer];
    });
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    expect((await bench.finish()).result).toEqual((await undisturbed()).kept?.result);
    expect(bench.notices).toContainEqual(
      expect.objectContaining({ level: 'warn', code: 'dimension-wrong', site: 'castlefen' }),
    );
  });

  test('at least two of any site: starts at the deadline with all that are there', async () => {
    const bench = new Bench(memoryStore(), honest, { sites: { least: 2 } });
    void bench.host.open();
    bench.connect('lindell-bay');
    bench.connect('castlefen');
    await bench.time.pass(999);
    expect(bench.host.state.state).toBe('waiting');
    bench.connect('harrowmere');
    const { result } = await bench.finish();
    expect(result.sites.map(({ site }) => site)).toEqual(['castlefen', 'harrowmere', 'lindell-bay']);
  });

  test('waits for its turn without losing patience', async () => {
    const bench = new Bench();
    bench.mayStart = false;
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    await bench.time.pass(20_000);
    expect(bench.host.state.state).toBe('waiting');
    bench.mayStart = true;
    bench.host.poke();
    expect((await bench.finish()).outcome).toBe('solved');
  });

  test('a defect of the run ends it as broken, and the host goes on', async () => {
    const bench = new Bench(memoryStore(), honest, {
      *fit(specification, digest, roster) {
        const run = toyRun(specification, digest, roster);
        const { value } = run.next();
        if ('works' in value) yield value;
        throw new Error('division by a site');
      },
    });
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    expect(await bench.finish()).toMatchObject({
      outcome: 'broken',
      reason: expect.stringMatching(/division by a site/),
    });
  });
});

describe('cancel', () => {
  test('ends a waiting run and a running one; an ended one cannot be cancelled', async () => {
    const waiting = new Bench();
    await waiting.host.open();
    expect(waiting.host.cancel()).toBe(true);
    expect((await waiting.finish()).outcome).toBe('cancelled');
    expect(waiting.host.cancel()).toBe(false);

    const running = new Bench();
    await running.host.open();
    for (const site of SITES) running.connect(site);
    await running.time.pass(15);
    running.host.cancel();
    expect(await running.finish()).toMatchObject({ outcome: 'cancelled', result: { rounds: 1, fits: [] } });
    expect(running.sent.at(-1)?.message).toEqual({ kind: 'run-end', run: 'r1', outcome: 'cancelled' });
  });
});

test('a cancellation and the last reply at the same moment: one end, and a journal that replays to it', async () => {
  const bench = new Bench(memoryStore(), () => []);
  await bench.host.open();
  for (const site of SITES) bench.connect(site);
  await bench.time.pass(5);
  bench.host.cancel();
  for (const { site, message } of [...bench.sent]) {
    const linked = bench.links.get(site);
    if (message.kind === 'ask' && linked !== undefined) {
      bench.host.receive(linked, toyAnswer(message, MEANS[site]));
    }
  }
  const end = await bench.finish();
  expect(end.outcome).toBe('cancelled');
  expect(bench.named('outcome')).toHaveLength(1);
  const again = new Bench(memoryStore(bench.store.bytes()));
  await again.host.open();
  expect(again.kept).toEqual(end);
});

describe('taking a run up from its journal', () => {
  test('cut off after any byte, the journal leads to the same result and a log without gap or repetition', async () => {
    const first = await undisturbed();
    const bytes = first.store.bytes();
    for (let length = 0; length <= bytes.length; length += 97) {
      const logged = first.events.filter(({ event }) => event === 'round').slice(0, 1);
      const again = new Bench(memoryStore(bytes.slice(0, length)), honest, { logged });
      await again.host.open();
      for (const site of SITES) again.connect(site);
      const end = await again.finish();
      expect(end.result).toEqual(first.kept?.result);
      expect(again.named('round').map(({ round }) => round)).toEqual([2, 3]);
    }
  });

  test('a run that had ended is published again without any site', async () => {
    const first = await undisturbed();
    const again = new Bench(memoryStore(first.store.bytes()));
    await again.host.open();
    expect(again.kept?.result).toEqual(first.kept?.result);
    expect(again.named('resumed')).toEqual([]);
  });

  test('a cancelled run stays cancelled', async () => {
    const first = new Bench();
    await first.host.open();
    for (const site of SITES) first.connect(site);
    await first.time.pass(15);
    first.host.cancel();
    const end = await first.finish();
    const again = new Bench(memoryStore(first.store.bytes()));
    await again.host.open();
    expect(again.kept).toEqual(end);
  });

  test('says that it goes on, and asks only what is not recorded', async () => {
    const first = new Bench();
    await first.host.open();
    for (const site of SITES) first.connect(site);
    await first.time.pass(15);
    await first.host.close();
    const again = new Bench(memoryStore(first.store.bytes()));
    await again.host.open();
    expect(again.named('resumed')).toMatchObject([{ round: 1 }]);
    for (const site of SITES) again.connect(site);
    await again.finish();
    const asks = again.sent.flatMap(({ message }) => (message.kind === 'ask' ? [message.ask] : []));
    expect(new Set(asks)).toEqual(new Set([2, 3]));
  });

  test('a damaged journal, or one of another specification, ends the run as broken', async () => {
    const bytes = (await undisturbed()).store.bytes();
    bytes[40] ^= 1;
    const damaged = new Bench(memoryStore(bytes));
    await damaged.host.open();
    expect(damaged.kept).toMatchObject({
      outcome: 'broken',
      reason: expect.stringMatching(/\[journal-broken\]/),
    });
    expect(damaged.store.bytes()).toEqual(bytes);
  });

  test('a run that asks something else than it asked then is journal-broken', async () => {
    const first = await undisturbed();
    const other = new Bench(memoryStore(first.store.bytes()), honest, {
      *fit(specification, digest, roster) {
        const { value } = toyRun(specification, digest, roster).next();
        if ('works' in value) yield { ...value, works: value.works.map(() => [{ work: 'factor' as const }]) };
        throw new Error('not reached');
      },
    });
    await other.host.open();
    expect(other.kept?.outcome).toBe('broken');
    expect(other.kept?.reason).toMatch(/Ask 1 was another one.*\[journal-broken\]/);
  });
});

describe('a state folder that cannot be written', () => {
  test('halts the run: no answer counts that is not recorded, no outcome is told', async () => {
    const store = memoryStore();
    const full = fail('state-unwritable', 'No space.');
    let appends = 0;
    const bench = new Bench({
      ...store,
      append: async (bytes) => {
        appends += 1;
        return appends > 2 ? full : store.append(bytes);
      },
    });
    await bench.host.open();
    for (const site of SITES) bench.connect(site);
    await bench.time.pass(60_000);
    expect(bench.host.state).toMatchObject({ state: 'halted', reason: expect.stringMatching(/No space/) });
    expect(bench.kept).toBeNull();
    expect(bench.named('round').map(({ round }) => round)).toEqual([1]);
    const again = new Bench(memoryStore(store.bytes()));
    await again.host.open();
    for (const site of SITES) again.connect(site);
    expect((await again.finish()).result).toEqual((await undisturbed()).kept?.result);
  });
});
