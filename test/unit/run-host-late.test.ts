import { describe, expect, test } from 'vitest';
import { memoryStore } from '../../coordinator/journal/memory-store.js';
import type { RunEnd } from '../../coordinator/run/run.js';
import { Bench, honest, type Replies, SITES, undisturbed } from '../support/run-host-bench.js';
import { LATE_ROUNDS, lateSpecification, toyLateRun } from '../support/toy-late-run.js';

const DELAY_MS: Record<string, number> = { harrowmere: 10, 'lindell-bay': 20, castlefen: 130 };
const late = { run: toyLateRun, specification: lateSpecification(SITES) };

function connectAll(bench: Bench, sites: readonly string[] = SITES): void {
  for (const site of sites) bench.connect(site, DELAY_MS[site]);
}

async function opened(store = memoryStore(), replies: Replies = honest, more = {}): Promise<Bench> {
  const bench = new Bench(store, replies, { ...late, ...more });
  await bench.host.open();
  connectAll(bench);
  return bench;
}

/** The end that the journal of a bench leads to by itself. */
async function replayed(bench: Bench): Promise<RunEnd | null> {
  const again = new Bench(memoryStore(bench.store.bytes()), () => [], late);
  await again.host.open();
  return again.kept;
}

const asksTo = (bench: Bench, site: string): number[] =>
  bench.sent.flatMap((one) => (one.site === site && one.message.kind === 'ask' ? [one.message.ask] : []));

/** Lengths at which the journal ends between two records, or within one. */
const cuts = (bytes: Uint8Array): number[] =>
  Array.from({ length: Math.ceil(bytes.length / 211) }, (_, index) => index * 211);

describe('a run with a quorum', () => {
  test('goes on without waiting for the slow site, and counts its reply when it comes', async () => {
    const bench = await opened();
    const end = await bench.finish();
    expect(end.outcome).toBe('solved');
    const rounds = bench.named('round');
    expect(rounds).toHaveLength(LATE_ROUNDS);
    // the quorum is there after 20 ms, and its grace over after 60; once castlefen owes a reply, two are asked
    expect(rounds.slice(0, 3).map(({ tookMs }) => tookMs)).toEqual([60, 20, 20]);
    expect(rounds[0]).toMatchObject({
      standIns: [{ site: 'castlefen', round: null }],
      slowest: { site: 'lindell-bay', ms: 20 },
    });
    expect(asksTo(bench, 'castlefen').length).toBeLessThan(asksTo(bench, 'harrowmere').length);
    expect(await replayed(bench)).toEqual(end);
  });

  test('killed anywhere, it asks the late site what it owed, ends, and its journal replays to the same end', async () => {
    const first = await opened();
    await first.finish();
    const bytes = first.store.bytes();
    for (const length of cuts(bytes)) {
      const bench = await opened(memoryStore(bytes.slice(0, length)));
      const end = await bench.finish();
      expect(end).toMatchObject({ outcome: 'solved', result: { rounds: LATE_ROUNDS } });
      expect(await replayed(bench)).toEqual(end);
    }
  });

  test('taken up in the middle of a partial round, the open ask of the late site goes out again and its reply counts', async () => {
    const first = await opened();
    await first.time.pass(215);
    expect(first.named('round').at(-1)?.round).toBe(2);
    await first.host.close();
    const again = await opened(memoryStore(first.store.bytes()), honest, { logged: first.events });
    await again.finish();
    expect(asksTo(again, 'castlefen')[0]).toBe(2);
    expect(asksTo(again, 'harrowmere')[0]).toBe(4);
    expect(again.named('round')[0]).toMatchObject({ round: 3 });
  });

  test('a reply that fits another ask than the one owed closes the link of the late site', async () => {
    let wrong = true;
    const bench = await opened(memoryStore(), (ask, site) => {
      const [reply] = honest(ask, site);
      if (site === 'castlefen' && ask.ask === 2 && wrong && reply.kind === 'answer') {
        wrong = false;
        bench.time.after(200, () => bench.connect(site, DELAY_MS[site]));
        return [{ ...reply, work: [{ work: 'factor', factors: [Float64Array.of(1)] }] }];
      }
      return [reply];
    });
    expect((await bench.finish()).outcome).toBe('solved');
    expect(bench.notices).toContainEqual(
      expect.objectContaining({ level: 'warn', code: 'answer-unasked', site: 'castlefen' }),
    );
  });
});

describe('a run that goes on without a site', () => {
  const gone: Replies = (ask, site) => (site === 'castlefen' && ask.ask >= 3 ? [] : honest(ask, site));

  test('begins again from the survey, says so, and asks the site nothing more', async () => {
    const bench = await opened(memoryStore(), gone);
    bench.time.after(20_000, () => bench.host.cancel());
    const end = await bench.finish();
    expect(end).toMatchObject({
      outcome: 'solved',
      result: {
        without: [{ site: 'castlefen', rowsUsed: 10 }],
        sites: [{ site: 'harrowmere' }, { site: 'lindell-bay' }],
      },
    });
    expect(bench.named('without')).toMatchObject([
      { sites: [{ site: 'castlefen', rowsUsed: 10 }], waitedMs: 5000 },
    ]);
    expect(bench.named('survey').map(({ rowsTotal }) => rowsTotal)).toEqual([30, 20]);
    expect(bench.named('outcome')).toMatchObject([{ without: ['castlefen'] }]);
    const rounds = bench.named('round').map(({ round }) => round);
    expect(rounds).toEqual(rounds.map((_, index) => index + 1));
    const [end1] = bench.sent.filter(
      ({ site, message }) => site === 'castlefen' && message.kind === 'run-end',
    );
    expect(end1.message).toMatchObject({ outcome: 'site-missing' });
    expect(await replayed(bench)).toEqual(end);
  });

  test('prepares the others with the new scaling before they are asked in it', async () => {
    const bench = await opened(memoryStore(), gone);
    await bench.finish();
    const kinds = bench.sent.flatMap(({ site, message }) =>
      site === 'harrowmere' && message.kind === 'prepare'
        ? [message.scaling === null ? 'survey' : 'solve']
        : [],
    );
    expect(kinds).toEqual(['survey', 'solve', 'survey', 'solve']);
  });

  test('a site that comes back after that is not asked, and named in the operational log only', async () => {
    const bench = await opened(memoryStore(), (ask, site) =>
      site === 'lindell-bay' && ask.ask > 8 ? [] : gone(ask, site),
    );
    await bench.time.pass(60_000, () => bench.named('without').length > 0);
    const asked = asksTo(bench, 'castlefen').length;
    bench.connect('castlefen');
    await bench.finish();
    expect(asksTo(bench, 'castlefen')).toHaveLength(asked);
    expect(bench.notices).toContainEqual({
      level: 'info',
      message: 'castlefen came after the run went on without it.',
      site: 'castlefen',
    });
    expect(bench.named('site').filter(({ site }) => site === 'castlefen')).toHaveLength(1);
  });

  test('killed anywhere, it goes on without the site in the end, and replays to the same end', async () => {
    const first = await opened(memoryStore(), gone);
    const expected = await first.finish();
    const bytes = first.store.bytes();
    for (const length of cuts(bytes)) {
      const bench = await opened(memoryStore(bytes.slice(0, length)), gone);
      const end = await bench.finish();
      expect(end).toMatchObject({ outcome: 'solved', result: { without: expected.result.without } });
      expect(bench.named('survey').map(({ rowsTotal }) => rowsTotal)).toEqual([30, 20]);
      expect(bench.named('without')).toHaveLength(1);
      expect(await replayed(bench)).toEqual(end);
    }
  });

  test('what the log held before the kill is not said again', async () => {
    const first = await opened(memoryStore(), gone);
    await first.finish();
    const bytes = first.store.bytes();
    const logged = first.events.filter(({ event }) => event !== 'outcome');
    const again = await opened(memoryStore(bytes.slice(0, bytes.length - 1)), gone, { logged });
    await again.finish();
    const said = new Set(again.events.map(({ event }) => event));
    expect(said).toEqual(new Set(['resumed', 'site', 'outcome']));
  });

  test('ends as site-missing where nobody is left', async () => {
    const bench = await opened(memoryStore(), (ask, site) => (ask.ask >= 3 ? [] : honest(ask, site)));
    const end = await bench.finish();
    expect(end).toMatchObject({ outcome: 'site-missing', result: { sites: [], fits: [] } });
    expect(await replayed(bench)).toEqual(end);
  });

  test('cancelled after that, the result names those left and those gone', async () => {
    const bench = await opened(memoryStore(), gone);
    await bench.time.pass(60_000, () => bench.named('survey').length === 2);
    bench.host.cancel();
    const end = await bench.finish();
    expect(end).toMatchObject({
      outcome: 'cancelled',
      result: {
        sites: [{ site: 'harrowmere', rowsUsed: 10 }, { site: 'lindell-bay' }],
        without: [{ site: 'castlefen', rowsUsed: 10 }],
      },
    });
    expect(await replayed(bench)).toEqual(end);
  });
});

test('a worker that has forgotten the run is prepared and asked again, and the result is the same', async () => {
  let forgotten = false;
  const bench = new Bench(memoryStore(), (ask, site) => {
    if (ask.ask !== 2 || site !== 'castlefen' || forgotten) return honest(ask, site);
    forgotten = true;
    return [{ kind: 'refusal', run: ask.run, ask: 2, code: 'run-unknown', message: '', remedy: null }];
  });
  void bench.host.open();
  for (const site of SITES) bench.connect(site);
  expect((await bench.finish()).result).toEqual((await undisturbed()).kept?.result);
  const kinds = bench.sent.flatMap(({ site, message }) => (site === 'castlefen' ? [message.kind] : []));
  expect(kinds).toEqual(['prepare', 'ask', 'ask', 'prepare', 'ask', 'ask', 'run-end']);
});
