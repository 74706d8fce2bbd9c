import { afterAll, afterEach, beforeAll, describe, expect, test } from 'vitest';
import type { LogEvent, RoundEvent } from '../../coordinator/run/log-event.js';
import { until } from '../support/processes.js';
import type { Breaking, Direction, Line } from '../support/slow-link.js';
import { type Following, roundsOf } from '../support/stage.js';
import {
  LONG_FIT,
  NO_CURVATURE,
  WIDE_FIT,
  WIDE_SITES,
  WideArea,
  type WideSite,
} from '../support/wide-area.js';

/** Four workers and their coordinator, in processes of their own, with lines between them as there are on the way. */
const BUSY = { timeout: 300_000 } as const;
/** Tests that last minutes, because what they are about does. */
const long = process.env.COMMONFIT_LONG === '1';

interface Undisturbed {
  readonly result: string;
  readonly rounds: readonly unknown[];
}

let wide: WideArea;
const undisturbed = new Map<string, Undisturbed>();

beforeAll(async () => {
  wide = await WideArea.open('wide-area', NO_CURVATURE);
  for (const fit of [WIDE_FIT, LONG_FIT]) {
    const following = wide.stage.submit(fit);
    const { code, result } = await wide.outcomeOf(following);
    expect(code).toBe(0);
    undisturbed.set(fit, { result, rounds: roundsOf(following.events()) });
  }
}, BUSY.timeout);
afterEach(() => {
  for (const link of wide.all) link.heal();
  wide.setLines({});
});

/** A run that takes long enough for something to happen in its middle. */
async function midRun(): Promise<Following> {
  wide.setLines({ oneWayMs: 20 });
  const following = wide.stage.submit(LONG_FIT);
  await following.round(2);
  if (following.has('outcome')) throw new Error('the run ended before its middle');
  return following;
}
afterAll(() => wide?.close());

/** The same bytes and the same rounds as without any disturbance. */
async function expectUndisturbed(fit: string, following: Following): Promise<LogEvent[]> {
  const { code, event, result } = await wide.outcomeOf(following);
  expect(event).toMatchObject({ outcome: 'solved', reason: null });
  expect(code).toBe(0);
  const events = following.events();
  expect({ result, rounds: roundsOf(events) }).toEqual(undisturbed.get(fit));
  return events;
}

async function fitOn(fit: string, line: Partial<Line>): Promise<LogEvent[]> {
  wide.setLines(line);
  return expectUndisturbed(fit, wide.stage.submit(fit));
}

const roundsIn = (events: readonly LogEvent[]): RoundEvent[] =>
  events.filter((event) => event.event === 'round');
const changesOf = (events: readonly LogEvent[], site: string): string[] =>
  events.flatMap((event) => (event.event === 'site' && event.site === site ? [event.change] : []));

describe('a fit ends with the bytes of the undisturbed one', BUSY, () => {
  test.each([100, 300])('where a round trip takes %i ms; every round takes at least one', async (ms) => {
    const rounds = roundsIn(await fitOn(WIDE_FIT, { oneWayMs: ms / 2 }));
    expect(rounds.length).toBeGreaterThan(2);
    for (const { tookMs, slowest } of rounds) {
      expect(tookMs).toBeGreaterThanOrEqual(ms);
      expect(slowest?.ms).toBeLessThanOrEqual(tookMs);
    }
  });

  test('where one segment of a hundred is lost', async () => {
    const lost = (): number => wide.all.reduce((sum, { segmentsLost }) => sum + segmentsLost, 0);
    const before = lost();
    await fitOn(LONG_FIT, { oneWayMs: 5, lossShare: 0.01 });
    expect(lost()).toBeGreaterThan(before);
  });

  test.skipIf(!long)('where the lines are as narrow as 6 kB a second', async () => {
    const bytesPerSecond = 6000;
    const rounds = roundsIn(await fitOn(WIDE_FIT, { bytesPerSecond }));
    // the numbers alone take that long: four sites at once, each on a line of its own
    for (const { tookMs, numbersUp } of rounds)
      expect(tookMs).toBeGreaterThanOrEqual((1000 * 8 * numbersUp) / WIDE_SITES.length / bytesPerSecond);
  });
});

describe(
  'a link that breaks in the middle of a frame is made again, and the result is the same',
  BUSY,
  () => {
    const cases: [string, Direction, Breaking, WideSite][] = [
      ['an answer, with a reset', 'up', 'reset', 'harrowmere'],
      ['an answer, with an end', 'up', 'end', 'lindell-bay'],
      ['an ask, with a reset', 'down', 'reset', 'castlefen'],
      ['an ask, with an end', 'down', 'end', 'oakhythe'],
    ];
    test.each(long ? cases : cases.filter(([, , breaking]) => breaking === 'reset'))(
      'in the middle of %s',
      async (_, direction, breaking, site) => {
        const following = wide.stage.submit(LONG_FIT);
        await following.round(2);
        await wide.link(site).cutMidFrame(direction, breaking);
        const events = await expectUndisturbed(LONG_FIT, following);
        expect(changesOf(events, site)).toEqual(['lost', 'connected']);
        for (const other of WIDE_SITES) if (other !== site) expect(changesOf(events, other)).toEqual([]);
      },
    );
  },
);

/** Cuts the line to some sites off for a time in the middle of a run, then heals it. */
async function partitioned(sites: readonly WideSite[], ms: number): Promise<LogEvent[]> {
  const following = await midRun();
  for (const site of sites) wide.link(site).partition();
  const startedMs = performance.now();
  await following.event('late', (late) => sites.every((site) => late.sites.includes(site)));
  await until('the end of the partition', () => performance.now() - startedMs >= ms, undefined, 2 * ms);
  expect(following.has('outcome')).toBeUndefined();
  for (const site of sites) wide.link(site).heal();
  return expectUndisturbed(LONG_FIT, following);
}

describe('a partition that heals', BUSY, () => {
  const cut: [string, readonly WideSite[]][] = [
    ['all sites', WIDE_SITES],
    ['one site', ['castlefen']],
  ];
  test.each(long ? cut : cut.slice(0, 1))(
    'of %s for 3 s: the log says who is late, the links hold, the result is the same',
    async (_, sites) => {
      const events = await partitioned(sites, 3000);
      for (const site of sites) expect(changesOf(events, site)).toEqual([]);
    },
  );

  test.runIf(long)('of one site for 60 s', async () => {
    const events = await partitioned(['castlefen'], 60_000);
    expect(events.filter(({ event }) => event === 'late').length).toBeGreaterThan(30);
    expect(changesOf(events, 'castlefen')).toEqual([]);
  });
});

test.runIf(long)(
  'a link that falls silent for good is given up after two minutes and made again',
  {
    timeout: 400_000,
  },
  async () => {
    const following = wide.stage.submit(LONG_FIT);
    await following.round(3);
    const link = wide.link('oakhythe');
    link.silence();
    const events = await expectUndisturbed(LONG_FIT, following);
    link.forgetSilent();
    expect(changesOf(events, 'oakhythe')).toEqual(['lost', 'connected']);
  },
);
