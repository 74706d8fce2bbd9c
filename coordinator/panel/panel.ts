import type { Refusal, WorkAnswer } from '../../protocol/messages/round.js';

/**
 * The panel of one run as a state machine: `step(state, event) → { state, effects }`. It owns the current ask, its
 * deadline and the patience of the run; it knows no clock and no link. Members are indices in roster order, times are
 * milliseconds on any one clock that does not go back.
 */
export interface PanelState {
  readonly settings: PanelSettings;
  readonly members: readonly MemberState[];
  readonly current: CurrentAsk | null;
  /** Number of the latest ask opened; 0 before the first. */
  readonly latestAsk: number;
}

export interface PanelSettings {
  /** Time after which a member without an answer is asked again. Milliseconds. */
  readonly deadlineMs: number;
  /** Time after which an ask is given up, naming the missing. Milliseconds. */
  readonly patienceMs: number;
}

export interface MemberState {
  readonly connected: boolean;
  readonly reply: Reply | null;
  /** When the reply came. */
  readonly repliedAtMs: number | null;
  /** The member has said that it lacks what an ask left out: on its present connection it is asked in full. */
  readonly full: boolean;
}

export interface CurrentAsk {
  readonly ask: number;
  readonly openedAtMs: number;
  readonly deadlineAtMs: number;
  readonly giveUpAtMs: number;
}

/** What counts as a member's one reply to an ask. */
export type Reply = readonly WorkAnswer[] | Refusal;

export type PanelEvent =
  | { readonly kind: 'ask'; readonly ask: number; readonly atMs: number }
  | { readonly kind: 'connected'; readonly member: number; readonly atMs: number }
  | { readonly kind: 'lost'; readonly member: number; readonly atMs: number }
  | {
      readonly kind: 'reply';
      readonly member: number;
      readonly ask: number;
      readonly reply: Reply;
      readonly atMs: number;
    }
  | { readonly kind: 'time'; readonly atMs: number };

export type PanelEffect =
  /** Send the current ask to this member; not `full`: what its connection has already may be left out. */
  | { readonly kind: 'send'; readonly member: number; readonly full: boolean }
  | {
      readonly kind: 'drop';
      readonly member: number;
      readonly ask: number;
      readonly code: 'answer-unasked';
      readonly why: 'duplicate' | 'older' | 'unasked';
    }
  | {
      readonly kind: 'late';
      readonly members: readonly number[];
      readonly waitedMs: number;
      readonly patienceLeftMs: number;
    }
  /** Everyone has replied: the replies in roster order. */
  | {
      readonly kind: 'pass';
      readonly ask: number;
      readonly replies: readonly Reply[];
      readonly tookMs: number;
      readonly slowest: { readonly member: number; readonly ms: number } | null;
    }
  | { readonly kind: 'give-up'; readonly members: readonly number[]; readonly waitedMs: number };

export interface PanelStep {
  readonly state: PanelState;
  readonly effects: readonly PanelEffect[];
}

const UNASKED = { reply: null, repliedAtMs: null, full: false } as const;

/** A panel of `memberCount` members, none connected, nothing asked. */
export function openPanel(memberCount: number, settings: PanelSettings): PanelState {
  const members = Array.from({ length: memberCount }, () => ({ connected: false, ...UNASKED }));
  return { settings, members, current: null, latestAsk: 0 };
}

/** When the panel wants its next `time` event; null while nothing is asked. */
export const wakeAtMs = ({ current }: PanelState): number | null =>
  current === null ? null : Math.min(current.deadlineAtMs, current.giveUpAtMs);

export const isRefusal = (reply: Reply): reply is Refusal => 'code' in reply;

export function step(state: PanelState, event: PanelEvent): PanelStep {
  switch (event.kind) {
    case 'ask':
      return openAsk(state, event.ask, event.atMs);
    case 'connected':
      return connect(state, event.member);
    case 'lost':
      return still(withMember(state, event.member, { connected: false }));
    case 'reply':
      return takeReply(state, event);
    case 'time':
      return passTime(state, event.atMs);
  }
}

function openAsk(state: PanelState, ask: number, atMs: number): PanelStep {
  const { deadlineMs, patienceMs } = state.settings;
  const opened: PanelState = {
    ...state,
    members: state.members.map(({ connected }) => ({ connected, ...UNASKED })),
    current: { ask, openedAtMs: atMs, deadlineAtMs: atMs + deadlineMs, giveUpAtMs: atMs + patienceMs },
    latestAsk: ask,
  };
  return sendTo(opened, unanswered(opened));
}

/** A new connection remembers nothing, so what was sent on the one before counts no more. */
function connect(state: PanelState, member: number): PanelStep {
  const fresh = withMember(state, member, { connected: true, full: false });
  const waits = fresh.current !== null && fresh.members[member]?.reply === null;
  return waits ? sendTo(fresh, [member]) : still(fresh);
}

function takeReply(state: PanelState, event: Extract<PanelEvent, { kind: 'reply' }>): PanelStep {
  const { member, ask, reply, atMs } = event;
  const { current } = state;
  const before = state.members[member];
  const drop = (why: 'duplicate' | 'older' | 'unasked'): PanelStep => ({
    state,
    effects: [{ kind: 'drop', member, ask, code: 'answer-unasked', why }],
  });
  if (before === undefined || ask > state.latestAsk) return drop('unasked');
  if (ask !== current?.ask) return drop('older');
  if (before.reply !== null) return drop('duplicate');
  if (isRefusal(reply) && reply.code === 'memory-missing') return askInFull(state, member, before);
  return passIfComplete(withMember(state, member, { reply, repliedAtMs: atMs }), current, atMs);
}

/**
 * Lacking a vector is no answer: the full ask goes out, once. A further such refusal is of a slim copy that went before
 * (or came twice); a member that refuses the full ask too is asked again at the deadline, and is missing in the end.
 */
function askInFull(state: PanelState, member: number, before: MemberState): PanelStep {
  return before.full ? still(state) : sendTo(withMember(state, member, { full: true }), [member]);
}

function passIfComplete(state: PanelState, current: CurrentAsk, atMs: number): PanelStep {
  const replies: Reply[] = [];
  let slowest: { member: number; ms: number } | null = null;
  for (const [member, { reply, repliedAtMs }] of state.members.entries()) {
    if (reply === null || repliedAtMs === null) return still(state);
    replies.push(reply);
    const ms = repliedAtMs - current.openedAtMs;
    if (slowest === null || ms > slowest.ms) slowest = { member, ms };
  }
  const tookMs = atMs - current.openedAtMs;
  return {
    state: { ...state, current: null },
    effects: [{ kind: 'pass', ask: current.ask, replies, tookMs, slowest }],
  };
}

function passTime(state: PanelState, atMs: number): PanelStep {
  const { current } = state;
  if (current === null) return still(state);
  const members = unanswered(state);
  const waitedMs = atMs - current.openedAtMs;
  if (atMs >= current.giveUpAtMs) {
    return { state: { ...state, current: null }, effects: [{ kind: 'give-up', members, waitedMs }] };
  }
  if (atMs < current.deadlineAtMs) return still(state);
  const deadlineAtMs = atMs + state.settings.deadlineMs;
  const again = sendTo({ ...state, current: { ...current, deadlineAtMs } }, members);
  const late: PanelEffect = { kind: 'late', members, waitedMs, patienceLeftMs: current.giveUpAtMs - atMs };
  return { state: again.state, effects: [late, ...again.effects] };
}

function sendTo(state: PanelState, members: readonly number[]): PanelStep {
  const effects = members.flatMap((member): PanelEffect[] => {
    const { connected, full } = state.members[member];
    return connected ? [{ kind: 'send', member, full }] : [];
  });
  return { state, effects };
}

const unanswered = (state: PanelState): number[] =>
  state.members.flatMap(({ reply }, member) => (reply === null ? [member] : []));

const still = (state: PanelState): PanelStep => ({ state, effects: [] });

function withMember(state: PanelState, member: number, change: Partial<MemberState>): PanelState {
  const members = state.members.map((before, index) =>
    index === member ? { ...before, ...change } : before,
  );
  return { ...state, members };
}
