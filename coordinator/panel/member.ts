import { type OpenBarrier, opensAtMs } from './barrier.js';
import type { Lack, MemberState, PanelSettings, PanelState } from './panel-state.js';

/** A panel of members of these sites, in roster order; none connected, nothing asked. */
export function openPanel(sites: readonly string[], settings: PanelSettings): PanelState {
  const members = sites.map(
    (site): MemberState => ({
      site,
      connected: false,
      gone: false,
      newest: 0,
      open: null,
      silentSinceMs: null,
      reply: null,
      lacks: 'nothing',
    }),
  );
  return { settings, members, barrier: null };
}

/** It owes the reply to this ask from now on; what it had not answered before still counts as its silence. */
export function asked(
  member: MemberState,
  ask: number,
  atMs: number,
  { settings }: Pick<PanelState, 'settings'>,
): MemberState {
  return {
    ...member,
    newest: ask,
    open: { ask, openedAtMs: atMs, deadlineAtMs: atMs + settings.deadlineMs },
    silentSinceMs: member.silentSinceMs ?? atMs,
    reply: null,
    lacks: 'nothing',
  };
}

export const leave = (member: MemberState): MemberState => ({
  ...member,
  gone: true,
  open: null,
  silentSinceMs: null,
  reply: null,
});

/** Asked again: the next deadline. */
export const postponed = (
  member: MemberState,
  atMs: number,
  { settings }: Pick<PanelState, 'settings'>,
): MemberState => ({
  ...member,
  open: member.open === null ? null : { ...member.open, deadlineAtMs: atMs + settings.deadlineMs },
});

/** What a refusal says that the member lacks. */
export const lackOf = (code: string): Lack =>
  code === 'memory-missing' ? 'vectors' : code === 'run-unknown' ? 'run' : 'nothing';

export const LACKS: readonly Lack[] = ['nothing', 'vectors', 'run'];

/** Members that owe a reply and are as `is` says. */
export function owing(
  { members }: PanelState,
  is: (owed: { readonly silentSinceMs: number; readonly deadlineAtMs: number }) => boolean,
): number[] {
  return members.flatMap(({ open, silentSinceMs }, member) =>
    open !== null && silentSinceMs !== null && is({ silentSinceMs, deadlineAtMs: open.deadlineAtMs })
      ? [member]
      : [],
  );
}

export const longestSilence = ({ members }: PanelState, of: readonly number[], atMs: number): number =>
  Math.max(...of.map((member) => atMs - (members[member].silentSinceMs ?? atMs)));

export const hasAllWaitedFor = ({ waitFor }: OpenBarrier, members: readonly MemberState[]): boolean =>
  waitFor.every((member) => members[member].reply !== null);

/**
 * When the barrier opens by the replies that the members have (`opensAtMs`); null: not without more of them. Asked at
 * every reply, so that nothing is gathered while one that is waited for is missing.
 */
export function barrierOpensAtMs(barrier: OpenBarrier, members: readonly MemberState[]): number | null {
  if (!hasAllWaitedFor(barrier, members)) return null;
  return opensAtMs(
    barrier,
    members.map(({ reply }) => reply?.atMs ?? null),
  );
}
