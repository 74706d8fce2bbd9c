import { describe, expect, test } from 'vitest';
import { openPanel } from '../../coordinator/panel/member.js';
import { wakeAtMs } from '../../coordinator/panel/panel.js';
import type { PanelEffect, PanelEvent } from '../../coordinator/panel/panel-state.js';
import { answer, askAll, connectAll, panelOf, play, refusal, reply, time } from '../support/panel-play.js';

const ask = (
  number: number,
  atMs: number,
  asked: readonly number[],
  waitFor: readonly number[] = [],
  quorum = asked.length,
): PanelEvent => ({ kind: 'ask', ask: number, asked, waitFor, quorum, atMs });

const passes = (effects: readonly PanelEffect[]) => effects.filter((effect) => effect.kind === 'pass');

describe('a barrier with a quorum', () => {
  test('opens for the quorum after a grace of three times what it took; the late reply goes with a later batch', () => {
    const first = play(panelOf(3), [
      ...connectAll(3),
      ask(1, 0, [0, 1, 2], [], 2),
      reply(0, 1, answer(0), 10),
      reply(1, 1, answer(1), 20),
    ]);
    expect(passes(first.effects)).toEqual([]);
    expect(wakeAtMs(first.state)).toBe(60);
    const opened = play(first.state, [time(59), time(60)]);
    expect(passes(opened.effects)).toMatchObject([
      {
        ask: 1,
        batch: { replies: [answer(0), answer(1), null], agesMs: [10, 20, 60], gone: [] },
        tookMs: 60,
        slowest: { member: 1, ms: 20 },
      },
    ]);
    const second = play(opened.state, [
      ask(2, 65, [0, 1]),
      reply(2, 1, answer(2), 70),
      reply(0, 2, answer(3), 75),
      reply(1, 2, answer(4), 76),
    ]);
    expect(passes(second.effects)).toMatchObject([
      {
        ask: 2,
        batch: { replies: [answer(3), answer(4), answer(2)], agesMs: [10, 11, 70] },
        slowest: { member: 1, ms: 11 },
      },
    ]);
  });

  test('within the grace the last of those asked ends the round at once', () => {
    const { effects } = play(panelOf(2), [
      ...connectAll(2),
      ask(1, 0, [0, 1], [], 1),
      reply(0, 1, answer(0), 10),
      reply(1, 1, answer(1), 29),
    ]);
    expect(passes(effects)).toMatchObject([{ tookMs: 29, batch: { replies: [answer(0), answer(1)] } }]);
  });

  test('waits for the members named, although they were asked before', () => {
    const late = play(panelOf(2), [
      ...connectAll(2),
      ask(1, 0, [0, 1], [], 1),
      reply(0, 1, answer(0), 10),
      time(30),
    ]);
    expect(passes(late.effects)).toHaveLength(1);
    const waits = play(late.state, [ask(2, 30, [0], [1]), reply(0, 2, answer(5), 35), time(95)]);
    expect(passes(waits.effects)).toEqual([]);
    const { effects } = play(waits.state, [reply(1, 1, answer(1), 99)]);
    expect(passes(effects)).toMatchObject([{ batch: { replies: [answer(5), answer(1)], agesMs: [5, 99] } }]);
  });

  test('where nobody is asked or waited for, the first reply opens it, one that is there already too', () => {
    const late = play(panelOf(3), [
      ...connectAll(3),
      ask(1, 0, [0, 1, 2], [], 1),
      reply(0, 1, answer(0), 0),
      reply(1, 1, answer(1), 7),
    ]);
    expect(passes(late.effects)).toHaveLength(1);
    const held = play(late.state, [ask(2, 9, [])]);
    expect(passes(held.effects)).toMatchObject([{ batch: { replies: [null, answer(1), null] }, tookMs: 0 }]);
    const next = play(held.state, [ask(3, 10, []), time(12), reply(2, 1, answer(2), 13)]);
    expect(passes(next.effects)).toMatchObject([{ ask: 3, batch: { replies: [null, null, answer(2)] } }]);
  });

  test('a newer ask takes the place of an open one: the reply to that counts no more', () => {
    const { effects } = play(panelOf(2), [
      ...connectAll(2),
      ask(1, 0, [0, 1], [], 1),
      reply(0, 1, answer(0), 0),
      ask(2, 5, [1]),
      reply(1, 1, answer(8), 6),
      reply(1, 2, answer(9), 7),
    ]);
    expect(effects.filter(({ kind }) => kind === 'drop')).toMatchObject([
      { member: 1, ask: 1, why: 'older' },
    ]);
    expect(passes(effects).at(-1)).toMatchObject({ batch: { replies: [null, answer(9)] } });
  });

  test('a reply that came while nothing was open is dropped where its member is asked anew', () => {
    const { effects } = play(panelOf(2), [
      ...connectAll(2),
      ask(1, 0, [0, 1], [], 1),
      reply(0, 1, answer(0), 0),
      reply(1, 1, answer(8), 3),
      ask(2, 5, [0, 1]),
      reply(0, 2, answer(1), 6),
    ]);
    expect(effects).toContainEqual(
      expect.objectContaining({ kind: 'drop', member: 1, ask: 1, why: 'older' }),
    );
    expect(passes(effects)).toHaveLength(1);
  });

  test('each member has its own deadline', () => {
    const { state, effects } = play(panelOf(2), [
      ...connectAll(2),
      ask(1, 0, [0, 1], [], 1),
      reply(0, 1, answer(0), 0),
      ask(2, 40, [0], [0]),
      time(100),
      time(140),
    ]);
    expect(effects.filter(({ kind }) => kind === 'late')).toEqual([
      { kind: 'late', members: [1], waitedMs: 100, patienceLeftMs: 250 },
      { kind: 'late', members: [0], waitedMs: 100, patienceLeftMs: 250 },
    ]);
    expect(wakeAtMs(state)).toBe(200);
  });

  test('silence counts from the first ask without an answer; an answer that is too old is a sign of life', () => {
    const silent = [
      ...connectAll(2),
      ask(1, 0, [0, 1], [], 1),
      reply(0, 1, answer(0), 0),
      ask(2, 300, [1], [1]),
    ];
    expect(play(panelOf(2), [...silent, time(350)]).effects.at(-1)).toMatchObject({
      kind: 'give-up',
      members: [1],
      waitedMs: 350,
    });
    const alive = play(panelOf(2), [...silent, reply(1, 1, answer(1), 310), time(350), time(649)]);
    expect(alive.effects.map(({ kind }) => kind)).not.toContain('give-up');
    expect(play(alive.state, [time(650)]).effects.at(-1)).toMatchObject({ kind: 'give-up', waitedMs: 350 });
  });
});

describe('a site that is gone for good, missing: go-without', () => {
  test('what has come passes at once, naming all members of the site; nothing of it counts again', () => {
    const panel = openPanel(['harrowmere', 'castlefen', 'castlefen'], {
      deadlineMs: 100,
      patienceMs: 350,
      missing: 'go-without',
    });
    const gone = play(panel, [
      ...connectAll(3),
      askAll(3, 1),
      reply(0, 1, answer(0), 10),
      reply(1, 1, answer(1), 20),
      time(350),
    ]);
    expect(passes(gone.effects)).toMatchObject([
      { batch: { replies: [answer(0), answer(1), null], agesMs: [10, 20, 350], gone: [1, 2] } },
    ]);
    const after = play(gone.state, [
      ask(2, 360, [0], [0]),
      { kind: 'connected', member: 2, atMs: 361 },
      reply(2, 1, answer(2), 362),
      reply(0, 2, answer(3), 363),
    ]);
    expect(after.effects.map(({ kind }) => kind)).toEqual(['send', 'drop', 'pass']);
    expect(after.effects[1]).toMatchObject({ why: 'gone' });
  });
});

describe('a member that lacks the run', () => {
  test('is prepared and asked again, once for an ask; the deadline does so once more', () => {
    const unknown = refusal('run-unknown');
    const { effects } = play(panelOf(1), [
      ...connectAll(1),
      askAll(1, 1),
      reply(0, 1, unknown, 10),
      reply(0, 1, unknown, 11),
      time(100),
      reply(0, 1, answer(4), 112),
      askAll(1, 2, 200),
    ]);
    expect(effects.flatMap((effect) => (effect.kind === 'send' ? [effect.lacks] : [effect.kind]))).toEqual([
      'nothing',
      'run',
      'late',
      'run',
      'pass',
      'nothing',
    ]);
  });

  test('lacking the run goes above lacking vectors, and not the other way', () => {
    const { effects } = play(panelOf(1), [
      ...connectAll(1),
      askAll(1, 1),
      reply(0, 1, refusal('memory-missing'), 10),
      reply(0, 1, refusal('run-unknown'), 11),
      reply(0, 1, refusal('memory-missing'), 12),
    ]);
    expect(effects.flatMap((effect) => (effect.kind === 'send' ? [effect.lacks] : []))).toEqual([
      'nothing',
      'vectors',
      'run',
    ]);
  });
});

describe('a panel taken up again', () => {
  test('asks a late member what it owed before, and knows who is gone', () => {
    const { effects } = play(panelOf(3, 'go-without'), [
      { kind: 'gone', member: 2, atMs: 0 },
      { kind: 'owes', member: 1, ask: 4, atMs: 0 },
      ...connectAll(3),
      ask(7, 5, [0]),
      reply(1, 4, answer(1), 6),
      reply(0, 7, answer(0), 8),
    ]);
    expect(effects.filter(({ kind }) => kind === 'send')).toMatchObject([
      { member: 1, ask: 4 },
      { member: 0, ask: 7 },
    ]);
    expect(passes(effects)).toMatchObject([
      { batch: { replies: [answer(0), answer(1), null], agesMs: [3, 6, 0] } },
    ]);
  });
});
