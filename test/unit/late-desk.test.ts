import { describe, expect, test } from 'vitest';
import { LateDesk, type Posting } from '../../coordinator/consensus/late-desk.js';
import type { LateAsk, SitePost, SiteReply } from '../../coordinator/consensus/late-method.js';
import type { Progress } from '../../coordinator/consensus/method.js';
import { SlowSites } from '../../coordinator/consensus/slow-sites.js';

const progress: Progress = {
  rung: 'curvature',
  purpose: 'test',
  primalResidual: null,
  dualResidual: null,
  relativeGap: null,
  gapMeasured: false,
  objective: null,
};
const post: SitePost = { kind: 'evaluate', point: Float64Array.of(0), want: 'value' };
const reply: SiteReply = {
  kind: 'evaluate',
  at: { value: 1, gradient: null, diagonal: null, curvature: null },
};
const to = (...sites: number[]): Posting<string>[] =>
  sites.map((site) => ({ site, post, note: `to ${site}` }));

/** One round: what was yielded, and who arrived when these sites reply. */
function round(
  desk: LateDesk<string>,
  postings: readonly Posting<string>[],
  replying: readonly number[],
  { waitFor = [], late = [] }: { waitFor?: number[]; late?: number[] } = {},
  agesMs = [0, 0, 0, 0],
): { ask: LateAsk; arrived: string[] } {
  const asking = desk.ask(postings, { waitFor, late }, progress);
  const asked = asking.next();
  if (asked.done) throw new Error('a round asks');
  const replies = [0, 1, 2, 3].map((i) => (replying.includes(i) ? reply : null));
  const ended = asking.next({ replies, agesMs });
  if (!ended.done) throw new Error('a round asks once');
  return { ask: asked.value, arrived: ended.value.map(({ note }) => note) };
}

const deskOf = (quorum: number, oldest: number) =>
  new LateDesk<string>({ quorum, oldest, agesMs: [0, 0, 0, 0] });

describe('the desk of late rounds', () => {
  test('a reply belongs to the newest thing asked, once', () => {
    const desk = deskOf(3, 9);
    expect(round(desk, to(0, 1, 2, 3), [0, 1, 2]).arrived).toEqual(['to 0', 'to 1', 'to 2']);
    expect(desk.owed(3)?.note).toBe('to 3');
    round(desk, [{ site: 3, post, note: 'again' }], []);
    expect(round(desk, [], [3]).arrived).toEqual(['again']);
    expect(round(desk, [], [3]).arrived).toEqual([]);
  });

  test('the quorum counts the sites asked that are not known to be late', () => {
    expect(round(deskOf(3, 9), to(0, 1, 2, 3), [0]).ask.quorum).toBe(3);
    expect(round(deskOf(3, 9), to(0, 1, 2), [0], { late: [2] }).ask.quorum).toBe(2);
    expect(round(deskOf(3, 9), to(2), [2], { late: [2] }).ask.quorum).toBe(1);
  });

  test('only sites that owe an answer are waited for', () => {
    const desk = deskOf(3, 9);
    expect(round(desk, to(0, 1), [0], { waitFor: [0, 1, 2] }).ask.waitFor).toEqual([0, 1]);
    expect(round(desk, [], [], { waitFor: [0, 1, 2] }).ask.waitFor).toEqual([1]);
  });

  test('an answer that is due and has not come is stood in for by the one of its round', () => {
    const desk = deskOf(3, 9);
    expect(round(desk, to(0, 1, 2, 3), [0, 1, 2]).ask.standIns).toEqual([]);
    expect(round(desk, to(0, 1, 2), [1]).ask.standIns).toEqual([{ site: 3, round: null }]);
    expect(round(desk, to(1), [1]).ask.standIns).toEqual([
      { site: 0, round: 1 },
      { site: 2, round: 1 },
      { site: 3, round: null },
    ]);
  });

  test('an answer may be so many rounds old and no older', () => {
    const desk = deskOf(1, 2);
    round(desk, to(0, 1), [0, 1]);
    expect([desk.isOld(0), desk.isOld(3)]).toEqual([false, false]);
    round(desk, to(1), [1]);
    expect([desk.isOld(0), desk.isOld(3)]).toEqual([false, true]);
    round(desk, to(1), [1]);
    expect([desk.isOld(0), desk.isOld(1)]).toEqual([true, false]);
  });

  test('with age 0 every site is waited for in every round', () => {
    const desk = deskOf(1, 0);
    expect(desk.sites().map((i) => desk.isOld(i))).toEqual([true, true, true, true]);
    round(desk, to(0), [0]);
    expect(desk.isOld(0)).toBe(true);
  });
});

describe('who is slow', () => {
  test('the survey tells before the first answer, and no longer after it', () => {
    const times = new SlowSites([1000, 1100, 9000, 1000]);
    expect(times.slow()).toEqual([2]);
    times.answered(2, 1000);
    expect(times.slow()).toEqual([]);
  });

  test('a site is slow while it owes for long, and by the median of its last three answers', () => {
    const times = new SlowSites([1000, 1000, 1000, 1000]);
    times.owes(1, 3900);
    expect(times.slow()).toEqual([]);
    times.owes(1, 4100);
    expect(times.slow()).toEqual([1]);
    times.answered(1, 9000);
    expect(times.slow()).toEqual([1]);
    for (const tookMs of [1000, 1000]) times.answered(1, tookMs);
    expect(times.slow()).toEqual([]);
  });

  test('nobody is slow where no time is known', () => {
    expect(new SlowSites([0, 0, 0]).slow()).toEqual([]);
  });
});
