import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { step } from '../../coordinator/panel/panel.js';
import type { PanelEvent, Reply } from '../../coordinator/panel/panel-state.js';
import { askAll, panelOf } from '../support/panel-play.js';

const MEMBERS = 4;
const ASK = 7;
const patientPanel = () => {
  const panel = panelOf(MEMBERS);
  return { ...panel, settings: { ...panel.settings, deadlineMs: 10, patienceMs: 1e6 } };
};

/** Every reply is told apart by its value. */
const reply = (value: number): Reply => [
  {
    work: 'evaluate',
    problem: 0,
    points: [{ value, gradient: null, diagonal: null, curvature: null }],
    ownFit: null,
    sketch: null,
  },
];

const member = fc.nat({ max: MEMBERS - 1 });
const disturbance = fc.oneof(
  fc.record({ kind: fc.constant('connected' as const), member }),
  fc.record({ kind: fc.constant('lost' as const), member }),
  fc.record({ kind: fc.constant('time' as const) }),
  fc.record({
    kind: fc.constant('reply' as const),
    member,
    ask: fc.constantFrom(ASK - 1, ASK, ASK, ASK + 1),
    value: fc.nat(),
  }),
);

describe('panel under any order of events', () => {
  test('the first reply of each member to the current ask counts, and they pass once, in roster order', () => {
    fc.assert(
      fc.property(fc.array(disturbance, { maxLength: 60 }), (events) => {
        let state = step(patientPanel(), askAll(MEMBERS, ASK)).state;
        const firstOf = new Map<number, Reply>();
        const passes: (readonly (Reply | null)[])[] = [];
        const drops: number[] = [];
        let replies = 0;
        for (const [index, event] of events.entries()) {
          const atMs = index + 1;
          const full: PanelEvent =
            event.kind === 'reply' ? { ...event, reply: reply(event.value), atMs } : { ...event, atMs };
          if (full.kind === 'reply') {
            replies += 1;
            if (full.ask === ASK && !firstOf.has(full.member)) firstOf.set(full.member, full.reply);
          }
          const after = step(state, full);
          state = after.state;
          for (const effect of after.effects) {
            if (effect.kind === 'pass') passes.push(effect.batch.replies);
            if (effect.kind === 'drop') drops.push(effect.ask);
          }
        }
        const complete = firstOf.size === MEMBERS;
        expect(passes).toEqual(complete ? [[0, 1, 2, 3].map((index) => firstOf.get(index))] : []);
        expect(replies - drops.length).toBe(firstOf.size);
      }),
    );
  });

  test('while an ask is open, a connected member without a reply has been sent it on its present connection', () => {
    fc.assert(
      fc.property(fc.array(disturbance, { maxLength: 60 }), (events) => {
        let state = step(patientPanel(), askAll(MEMBERS, ASK)).state;
        const sent = new Set<number>();
        for (const [index, event] of events.entries()) {
          const atMs = index + 1;
          if (event.kind === 'connected' || event.kind === 'lost') sent.delete(event.member);
          const after = step(
            state,
            event.kind === 'reply' ? { ...event, reply: reply(event.value), atMs } : { ...event, atMs },
          );
          state = after.state;
          for (const effect of after.effects) if (effect.kind === 'send') sent.add(effect.member);
          if (state.barrier === null) return;
          for (const [who, { connected, reply: given }] of state.members.entries()) {
            if (connected && given === null) expect(sent.has(who)).toBe(true);
          }
        }
      }),
    );
  });
});
