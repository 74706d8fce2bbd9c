import { describe, expect, test } from 'vitest';
import { wakeAtMs } from '../../coordinator/panel/panel.js';
import { checkRoster } from '../../coordinator/panel/roster.js';
import { EMPTY_MEMORY, rememberAnswered, rememberSent, slimWorks } from '../../coordinator/panel/slim-ask.js';
import type { Work } from '../../protocol/messages/round.js';
import { answer, askAll, connectAll, panelOf, play, refusal, reply, time } from '../support/panel-play.js';

describe('panel', () => {
  test('asks the connected, and lets the replies through in roster order once all are there', () => {
    const { effects } = play(panelOf(3), [
      ...connectAll(3),
      askAll(3, 1),
      reply(2, 1, answer(2), 5),
      reply(0, 1, answer(0), 20),
      reply(1, 1, answer(1), 30),
    ]);
    expect(effects.filter(({ kind }) => kind === 'send')).toEqual(
      [0, 1, 2].map((member) => ({ kind: 'send', member, ask: 1, lacks: 'nothing' })),
    );
    expect(effects.at(-1)).toEqual({
      kind: 'pass',
      ask: 1,
      batch: { replies: [answer(0), answer(1), answer(2)], agesMs: [20, 30, 5], gone: [] },
      tookMs: 30,
      slowest: { member: 1, ms: 30 },
    });
  });

  test('a member that connects later is asked when it connects, and again after a reconnect', () => {
    const { effects } = play(panelOf(2), [
      { kind: 'connected', member: 0, atMs: 0 },
      askAll(2, 1),
      { kind: 'connected', member: 1, atMs: 5 },
      { kind: 'lost', member: 1, atMs: 6 },
      { kind: 'connected', member: 1, atMs: 7 },
    ]);
    expect(effects).toEqual([0, 1, 1].map((member) => ({ kind: 'send', member, ask: 1, lacks: 'nothing' })));
  });

  test('a member that has replied is not asked again when it reconnects', () => {
    const { effects } = play(panelOf(2), [
      ...connectAll(2),
      askAll(2, 1),
      reply(0, 1, answer(0)),
      { kind: 'lost', member: 0, atMs: 11 },
      { kind: 'connected', member: 0, atMs: 12 },
    ]);
    expect(effects).toHaveLength(2);
  });

  test('at each deadline those without a reply are named and asked again; then patience ends', () => {
    const opened = play(panelOf(3), [...connectAll(2), askAll(3, 1), reply(0, 1, answer(0))]);
    expect(wakeAtMs(opened.state)).toBe(100);
    const first = play(opened.state, [time(99), time(100)]);
    expect(first.effects).toEqual([
      { kind: 'late', members: [1, 2], waitedMs: 100, patienceLeftMs: 250 },
      { kind: 'send', member: 1, ask: 1, lacks: 'nothing' },
    ]);
    expect(wakeAtMs(first.state)).toBe(200);
    const last = play(first.state, [time(200), time(300), time(350)]);
    expect(wakeAtMs(last.state)).toBeNull();
    expect(last.effects.at(-1)).toEqual({ kind: 'give-up', members: [1, 2], waitedMs: 350 });
  });

  test('replies that nobody waits for are dropped with a code and a reason', () => {
    const { state, effects } = play(panelOf(2), [
      ...connectAll(2),
      askAll(2, 1),
      reply(0, 1, answer(0)),
      reply(1, 1, answer(1)),
      reply(1, 1, answer(9)),
      askAll(2, 2),
      reply(0, 1, answer(9)),
      reply(0, 3, answer(9)),
      reply(0, 2, answer(0)),
      reply(0, 2, answer(9)),
    ]);
    const drops = effects.filter((effect) => effect.kind === 'drop');
    expect(drops.map(({ why }) => why)).toEqual(['older', 'older', 'unasked', 'duplicate']);
    expect(new Set(drops.map(({ code }) => code))).toEqual(new Set(['answer-unasked']));
    expect(state.members[0].reply?.reply).toEqual(answer(0));
  });

  test('memory-missing brings the ask again in full, once, and is never an answer, however often it comes', () => {
    const missing = refusal('memory-missing');
    const { effects } = play(panelOf(1), [
      ...connectAll(1),
      askAll(1, 1),
      reply(0, 1, missing, 50),
      reply(0, 1, missing, 51),
      time(100),
      reply(0, 1, missing, 110),
      reply(0, 1, answer(4), 112),
    ]);
    expect(effects.map(({ kind }) => kind)).toEqual(['send', 'send', 'late', 'send', 'pass']);
    expect(effects.flatMap((effect) => (effect.kind === 'send' ? [effect.lacks] : []))).toEqual([
      'nothing',
      'vectors',
      'vectors',
    ]);
    expect(effects.at(-1)).toMatchObject({ batch: { replies: [answer(4)] } });
  });

  test('any other refusal passes the barrier in its place', () => {
    const { effects } = play(panelOf(2), [
      ...connectAll(2),
      askAll(2, 1),
      reply(0, 1, refusal('policy-rows')),
      reply(1, 1, answer(1)),
    ]);
    expect(effects.at(-1)).toMatchObject({
      kind: 'pass',
      batch: { replies: [refusal('policy-rows'), answer(1)] },
    });
  });
});

describe('slim asks', () => {
  const proximal = (diagonalAsk: number, startAsk: number): Work[] => [
    {
      work: 'proximal',
      problems: [
        {
          problem: 3,
          part: null,
          center: Float64Array.of(1),
          scale: 2,
          diagonal: Float64Array.of(5),
          diagonalAsk,
          start: Float64Array.of(7),
          startAsk,
        },
      ],
    },
  ];
  const leftOut = (works: readonly Work[]) =>
    works.flatMap((work) =>
      work.work === 'proximal'
        ? work.problems.map(({ diagonal, start }) => [diagonal === null, start === null])
        : [],
    );

  test('a diagonal is left out where it was sent, a start where its ask was answered', () => {
    const first = slimWorks(proximal(1, 1), EMPTY_MEMORY);
    expect(leftOut(first)).toEqual([[false, false]]);
    const sent = rememberSent(EMPTY_MEMORY, first);
    expect(leftOut(slimWorks(proximal(1, 1), sent))).toEqual([[true, false]]);
    const answered = rememberAnswered(sent, 1, [
      { work: 'proximal', problems: [{ problem: 3, point: Float64Array.of(0), newtonSteps: 1 }] },
    ]);
    expect(leftOut(slimWorks(proximal(1, 1), answered))).toEqual([[true, true]]);
    expect(leftOut(slimWorks(proximal(2, 1), answered))).toEqual([[false, true]]);
  });
});

describe('roster', () => {
  const member = (site: string, index = 1, of = 1) => ({ site, shard: { index, of }, kernel: 'k' });
  const named = (...sites: string[]) => ({ sites, barrier: { deadlineMs: 100 } }) as never;
  const least = (count: number) => ({ sites: { least: count }, barrier: { deadlineMs: 100 } }) as never;

  test('named sites: the specification says the order, shards by index', () => {
    const connected = [
      member('castlefen', 2, 2),
      member('harrowmere'),
      member('castlefen', 1, 2),
      member('other'),
    ];
    expect(checkRoster(named('castlefen', 'harrowmere'), connected, 0)).toEqual({
      ready: true,
      roster: [member('castlefen', 1, 2), member('castlefen', 2, 2), member('harrowmere')],
    });
  });

  test('a missing site or shard is named', () => {
    expect(checkRoster(named('castlefen', 'harrowmere'), [member('castlefen', 2, 3)], 0)).toEqual({
      ready: false,
      missing: ['castlefen#1', 'castlefen#3', 'harrowmere'],
    });
  });

  test('shards of two splits of a site never mix', () => {
    const connected = [member('castlefen', 1, 2), member('castlefen', 2, 3)];
    expect(checkRoster(named('castlefen'), connected, 0)).toMatchObject({ ready: false });
  });

  test('at least n sites: all that are there in full at the deadline, by name', () => {
    const connected = [member('oakhythe'), member('castlefen'), member('lindell-bay', 1, 2)];
    expect(checkRoster(least(2), connected, 99)).toEqual({ ready: false, missing: [] });
    expect(checkRoster(least(2), connected, 100)).toEqual({
      ready: true,
      roster: [member('castlefen'), member('oakhythe')],
    });
    expect(checkRoster(least(3), connected, 100)).toEqual({ ready: false, missing: ['1 more of any site'] });
  });
});
