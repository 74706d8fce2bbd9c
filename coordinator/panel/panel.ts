import {
  asked,
  barrierOpensAtMs,
  hasAllWaitedFor,
  LACKS,
  lackOf,
  leave,
  longestSilence,
  owing,
  postponed,
} from './member.js';
import {
  isRefusal,
  type Lack,
  type MemberState,
  type PanelEffect,
  type PanelEvent,
  type PanelState,
  type PanelStep,
} from './panel-state.js';

/**
 * The panel of one run as a state machine: `step(state, event) → { state, effects }`. It owns what each member owes,
 * its deadline and the patience of the run, and says when the barrier opens; it knows no clock and no link.
 */
export function step(state: PanelState, event: PanelEvent): PanelStep {
  switch (event.kind) {
    case 'ask':
      return openAsk(state, event);
    case 'owes':
      return still(withMember(state, event.member, (member) => asked(member, event.ask, event.atMs, state)));
    case 'gone':
      return still(withMember(state, event.member, leave));
    case 'connected':
      return connect(state, event.member);
    case 'lost':
      return still(withMember(state, event.member, (member) => ({ ...member, connected: false })));
    case 'reply':
      return takeReply(state, event);
    case 'time':
      return passTime(state, event.atMs);
  }
}

/** When the panel wants its next `time` event; null while no barrier is closed. */
export function wakeAtMs({ settings, members, barrier }: PanelState): number | null {
  if (barrier === null) return null;
  let next = barrierOpensAtMs(barrier, members) ?? Number.POSITIVE_INFINITY;
  for (const { open, silentSinceMs } of members)
    if (open !== null && silentSinceMs !== null)
      next = Math.min(next, open.deadlineAtMs, silentSinceMs + settings.patienceMs);
  return next === Number.POSITIVE_INFINITY ? null : next;
}

/**
 * False while a member that is waited for has not replied: a reply then sets no earlier time at which the panel wants to
 * be woken.
 */
export const mayOpen = ({ barrier, members }: PanelState): boolean =>
  barrier === null || hasAllWaitedFor(barrier, members);

function openAsk(state: PanelState, event: Extract<PanelEvent, { kind: 'ask' }>): PanelStep {
  const { ask, waitFor, quorum, atMs } = event;
  const now = event.asked.filter((member) => !state.members[member].gone);
  const superseded = now.flatMap((member): PanelEffect[] =>
    state.members[member].reply === null ? [] : [dropped(member, state.members[member].newest, 'older')],
  );
  const members = [...state.members];
  for (const member of now) members[member] = asked(members[member], ask, atMs, state);
  const barrier = { ask, asked: now, waitFor, quorum, openedAtMs: atMs };
  const sent = sendTo({ ...state, members, barrier }, now);
  const passed = passIfOpen(sent.state, atMs);
  return { state: passed.state, effects: [...superseded, ...sent.effects, ...passed.effects] };
}

/** A new connection remembers nothing, so what was sent on the one before counts no more. */
function connect(state: PanelState, member: number): PanelStep {
  const fresh = withMember(state, member, (before) => ({ ...before, connected: true, lacks: 'nothing' }));
  return sendTo(fresh, [member]);
}

function takeReply(state: PanelState, event: Extract<PanelEvent, { kind: 'reply' }>): PanelStep {
  const { member, ask, reply, atMs } = event;
  const before = state.members[member];
  const drop = (why: Extract<PanelEffect, { kind: 'drop' }>['why']): PanelStep => ({
    state,
    effects: [dropped(member, ask, why)],
  });
  if (before === undefined) return drop('unasked');
  if (before.gone) return drop('gone');
  if (ask > before.newest) return drop('unasked');
  if (ask < before.newest) return heard(drop('older'), member);
  const { open } = before;
  if (open === null) return drop(before.reply === null ? 'older' : 'duplicate');
  const lacks = isRefusal(reply) ? lackOf(reply.code) : 'nothing';
  if (lacks !== 'nothing') return askAgain(state, member, lacks);
  const taken = withMember(state, member, (owing) => ({
    ...owing,
    open: null,
    silentSinceMs: null,
    reply: { reply, atMs, tookMs: atMs - open.openedAtMs },
  }));
  return passIfOpen(taken, atMs);
}

/** A reply to an older ask does not count, but it is a sign of life: what is not answered is the newest ask only. */
const heard = ({ state, effects }: PanelStep, member: number): PanelStep => ({
  state: withMember(state, member, (before) => ({
    ...before,
    silentSinceMs: before.open?.openedAtMs ?? null,
  })),
  effects,
});

/**
 * Lacking a vector or the run is no answer: what is lacking goes out, once. A further such refusal is of a copy that
 * went before (or came twice); a member that refuses the full ask too is asked again at the deadline, and is missing in
 * the end.
 */
function askAgain(state: PanelState, member: number, lacks: Lack): PanelStep {
  if (LACKS.indexOf(state.members[member].lacks) >= LACKS.indexOf(lacks)) return still(state);
  return sendTo(
    withMember(state, member, (before) => ({ ...before, lacks })),
    [member],
  );
}

function passTime(state: PanelState, atMs: number): PanelStep {
  if (state.barrier === null) return still(state);
  const passed = passIfOpen(state, atMs);
  if (passed.state.barrier === null) return passed;
  const silent = owing(state, ({ silentSinceMs }) => atMs >= silentSinceMs + state.settings.patienceMs);
  if (silent.length > 0) return giveUp(state, silent, atMs);
  const late = owing(state, ({ deadlineAtMs }) => atMs >= deadlineAtMs);
  if (late.length === 0) return still(state);
  let again = state;
  for (const member of late) again = withMember(again, member, (before) => postponed(before, atMs, state));
  const waitedMs = longestSilence(state, late, atMs);
  const patienceLeftMs = state.settings.patienceMs - waitedMs;
  const sent = sendTo(again, late);
  return {
    state: sent.state,
    effects: [{ kind: 'late', members: late, waitedMs, patienceLeftMs }, ...sent.effects],
  };
}

function giveUp(state: PanelState, silent: readonly number[], atMs: number): PanelStep {
  if (state.settings.missing === 'stop') {
    const waitedMs = longestSilence(state, silent, atMs);
    return {
      state: { ...state, barrier: null },
      effects: [{ kind: 'give-up', members: silent, waitedMs }],
    };
  }
  const sites = new Set(silent.map((member) => state.members[member].site));
  const gone = [...state.members.keys()].filter((member) => sites.has(state.members[member].site));
  return pass(state, atMs, gone);
}

function passIfOpen(state: PanelState, atMs: number): PanelStep {
  if (state.barrier === null) return still(state);
  const opens = barrierOpensAtMs(state.barrier, state.members);
  return opens !== null && opens <= atMs ? pass(state, atMs, []) : still(state);
}

/** All that has come goes to the run, late replies to older asks among it. */
function pass(state: PanelState, atMs: number, gone: readonly number[]): PanelStep {
  const { barrier, members } = state;
  if (barrier === null) return still(state);
  let slowest: { member: number; ms: number } | null = null;
  for (const member of barrier.asked) {
    const ms = members[member].reply?.tookMs ?? null;
    if (ms !== null && (slowest === null || ms > slowest.ms)) slowest = { member, ms };
  }
  const batch = {
    replies: members.map(({ reply }) => reply?.reply ?? null),
    agesMs: members.map(({ reply, silentSinceMs }) =>
      Math.round(reply?.tookMs ?? (silentSinceMs === null ? 0 : atMs - silentSinceMs)),
    ),
    gone,
  };
  const passed = members.map((member, index) =>
    gone.includes(index) ? leave(member) : { ...member, reply: null },
  );
  return {
    state: { ...state, members: passed, barrier: null },
    effects: [{ kind: 'pass', ask: barrier.ask, batch, tookMs: atMs - barrier.openedAtMs, slowest }],
  };
}

function sendTo(state: PanelState, members: readonly number[]): PanelStep {
  const effects = members.flatMap((member): PanelEffect[] => {
    const { connected, open, lacks } = state.members[member];
    return connected && open !== null ? [{ kind: 'send', member, ask: open.ask, lacks }] : [];
  });
  return { state, effects };
}

const dropped = (
  member: number,
  ask: number,
  why: Extract<PanelEffect, { kind: 'drop' }>['why'],
): PanelEffect => ({ kind: 'drop', member, ask, code: 'answer-unasked', why });

const still = (state: PanelState): PanelStep => ({ state, effects: [] });

function withMember(
  state: PanelState,
  member: number,
  change: (before: MemberState) => MemberState,
): PanelState {
  const before = state.members[member];
  return before === undefined ? state : { ...state, members: state.members.with(member, change(before)) };
}
