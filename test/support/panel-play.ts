import { openPanel } from '../../coordinator/panel/member.js';
import { step } from '../../coordinator/panel/panel.js';
import type { PanelEvent, PanelSettings, PanelState, Reply } from '../../coordinator/panel/panel-state.js';
import type { Refusal } from '../../protocol/messages/round.js';

/** A panel of this many sites, each with one member. */
export const panelOf = (count: number, missing: PanelSettings['missing'] = 'stop'): PanelState =>
  openPanel(
    Array.from({ length: count }, (_, member) => `site-${member}`),
    { deadlineMs: 100, patienceMs: 350, missing },
  );

export const answer = (value: number): Reply => [
  {
    work: 'evaluate',
    problem: 0,
    points: [{ value, gradient: null, diagonal: null, curvature: null }],
    ownFit: null,
    sketch: null,
  },
];
export const refusal = (code: Refusal['code'], ask = 1): Refusal => ({
  kind: 'refusal',
  run: 'r',
  ask,
  code,
  message: 'no',
  remedy: null,
});

export function play(state: PanelState, events: readonly PanelEvent[]) {
  let now = state;
  const effects = events.flatMap((event) => {
    const after = step(now, event);
    now = after.state;
    return after.effects;
  });
  return { state: now, effects };
}

export const connectAll = (count: number): PanelEvent[] =>
  Array.from({ length: count }, (_, member) => ({ kind: 'connected', member, atMs: 0 }));
/** Everybody is asked, and everybody waited for. */
export const askAll = (count: number, ask: number, atMs = 0): PanelEvent => {
  const members = Array.from({ length: count }, (_, member) => member);
  return { kind: 'ask', ask, asked: members, waitFor: members, quorum: count, atMs };
};
export const reply = (member: number, number: number, body: Reply, atMs = 10): PanelEvent => ({
  kind: 'reply',
  member,
  ask: number,
  reply: body,
  atMs,
});
export const time = (atMs: number): PanelEvent => ({ kind: 'time', atMs });
