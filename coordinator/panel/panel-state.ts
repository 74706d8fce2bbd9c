import type { Refusal, WorkAnswer } from '../../protocol/messages/round.js';
import type { Batch } from '../run/run.js';
import type { OpenBarrier } from './barrier.js';

/** Members are indices in roster order, times are milliseconds on any one clock that does not go back. */
export interface PanelState {
  readonly settings: PanelSettings;
  readonly members: readonly MemberState[];
  /** The barrier of the newest ask; null once it has opened. */
  readonly barrier: (OpenBarrier & { readonly ask: number }) | null;
}

export interface PanelSettings {
  /** Time after which a member without an answer is asked again. Milliseconds. */
  readonly deadlineMs: number;
  /** Time without a sign of a member after which it is given up. Milliseconds. */
  readonly patienceMs: number;
  /** What giving a member up means: the end of the run, or going on without its whole site. */
  readonly missing: 'stop' | 'go-without';
}

export interface MemberState {
  readonly site: string;
  readonly connected: boolean;
  /** Given up for good: it is asked nothing more, and nothing that it sends counts. */
  readonly gone: boolean;
  /** Number of its newest ask; 0 before the first. */
  readonly newest: number;
  /** Its newest ask, while it owes the reply. */
  readonly open: { readonly ask: number; readonly openedAtMs: number; readonly deadlineAtMs: number } | null;
  /** Since when it has owed a reply without a break, whatever it was asked meanwhile. */
  readonly silentSinceMs: number | null;
  /** The reply to its newest ask, until the barrier lets it through. */
  readonly reply: { readonly reply: Reply; readonly atMs: number; readonly tookMs: number } | null;
  readonly lacks: Lack;
}

/**
 * What a member has said that it lacks, on its present connection and of its newest ask: vectors that the ask left out
 * (it goes out in full), or the run itself (it is prepared once more before).
 */
export type Lack = 'nothing' | 'vectors' | 'run';

/** What counts as a member's one reply to an ask. */
export type Reply = readonly WorkAnswer[] | Refusal;

export type PanelEvent =
  | {
      readonly kind: 'ask';
      readonly ask: number;
      /** Members asked now, in place of anything they have not answered; the others keep what they owe. */
      readonly asked: readonly number[];
      readonly waitFor: readonly number[];
      readonly quorum: number;
      readonly atMs: number;
    }
  /** A member owes the reply to this ask, opened before the coordinator was started again. */
  | { readonly kind: 'owes'; readonly member: number; readonly ask: number; readonly atMs: number }
  /** A member was given up on before the coordinator was started again. */
  | { readonly kind: 'gone'; readonly member: number; readonly atMs: number }
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
  /** Send this member its open ask. */
  | { readonly kind: 'send'; readonly member: number; readonly ask: number; readonly lacks: Lack }
  | {
      readonly kind: 'drop';
      readonly member: number;
      readonly ask: number;
      readonly code: 'answer-unasked';
      readonly why: 'duplicate' | 'older' | 'unasked' | 'gone';
    }
  | {
      readonly kind: 'late';
      readonly members: readonly number[];
      /** Of the one waited for longest. */
      readonly waitedMs: number;
      readonly patienceLeftMs: number;
    }
  /** The barrier has opened: what has come goes to the run. */
  | {
      readonly kind: 'pass';
      readonly ask: number;
      readonly batch: Batch;
      readonly tookMs: number;
      /** Of the members asked by this ask that have replied. */
      readonly slowest: { readonly member: number; readonly ms: number } | null;
    }
  | { readonly kind: 'give-up'; readonly members: readonly number[]; readonly waitedMs: number };

export interface PanelStep {
  readonly state: PanelState;
  readonly effects: readonly PanelEffect[];
}

export const isRefusal = (reply: Reply): reply is Refusal => 'code' in reply;
