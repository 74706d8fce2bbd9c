import type { Refusal, Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { Progress } from '../consensus/method.js';
import type { ResultDocument } from './result.js';

/**
 * A run: yields asks to the members of the roster, is sent what the barrier let through, and ends with one outcome.
 * It knows no clock, link or file; sockets, the simulator and a journal drive it alike.
 */
export type Run = Generator<RunAsk, RunEnd, Batch>;

/** One member of the roster: a site, or one shard of a large site. Order is fixed for the run. */
export interface Member {
  readonly site: string;
  readonly shard: { readonly index: number; readonly of: number };
  readonly kernel: string;
}

/** `harrowmere`, or `harrowmere#2` for the second of several shards. */
export const memberName = (member: Pick<Member, 'site' | 'shard'>): string =>
  member.shard.of === 1 ? member.site : `${member.site}#${member.shard.index}`;

export type AfterSurvey = Exclude<Stage, 'survey'>;
export type Stage = 'survey' | 'solve' | 'choose' | 'describe';

export interface RunAsk {
  readonly stage: Stage;
  /**
   * What each member is asked, in roster order, in full, in place of anything it has not answered; null: nothing new
   * (an older ask of it may be open).
   */
  readonly works: readonly (readonly Work[] | null)[];
  readonly barrier: Barrier;
  /** Known once the survey is pooled; members are prepared with it before this ask. */
  readonly scaling: Scaling | null;
  /** What the answers to the ask before have shown. */
  readonly shown: Shown | null;
}

/** When the answers go to the run. */
export interface Barrier {
  /** Members, by index, without whose reply the barrier does not open. */
  readonly waitFor: readonly number[];
  /** Replies, of the members asked now, with which it may open without the others of them after a time of grace. */
  readonly quorum: number;
}

/** What came before the barrier opened. */
export interface Batch {
  /** In roster order: the reply to the newest ask of that member; null: none has come. */
  readonly replies: readonly (MemberReply | null)[];
  /**
   * Per member: how long its reply took; of one that owes a reply, how long it has been waited for since the first ask
   * that it has not answered; 0 where neither. Whole milliseconds.
   */
  readonly agesMs: readonly number[];
  /** Members given up on for good, where the specification lets the run go on without them. */
  readonly gone: readonly number[];
}

/** A member's answers, one per work item, or its refusal. */
export type MemberReply = readonly WorkAnswer[] | Refusal;

/** In roster order, every member's. */
export type RosterAnswers = readonly MemberReply[];

export const everyone = (count: number): number[] => Array.from({ length: count }, (_, i) => i);

/** Asks every member and waits for every one of them. */
export function* askAll(
  ask: Omit<RunAsk, 'barrier'>,
): Generator<RunAsk, { readonly answers: RosterAnswers; readonly agesMs: readonly number[] }, Batch> {
  const count = ask.works.length;
  const { replies, agesMs } = yield { ...ask, barrier: { waitFor: everyone(count), quorum: count } };
  const answers = replies.filter((reply) => reply !== null);
  if (answers.length < count) throw new TypeError('the barrier opened before every member had replied');
  return { answers, agesMs };
}

/** What a round showed, for the round log; the host adds the times. */
export type Shown =
  | {
      readonly kind: 'survey';
      readonly rowsTotal: number;
      readonly coefficients: number;
      readonly rung: Progress['rung'];
      /** Why this rung and not one above it. */
      readonly rungReason: string;
      readonly sites: readonly {
        readonly site: string;
        readonly rowsUsed: number;
        readonly rowsDropped: number;
      }[];
      readonly notes: readonly string[];
    }
  | {
      readonly kind: 'round';
      readonly stage: AfterSurvey;
      /** 1-based, over the stages after the survey. */
      readonly round: number;
      readonly progress: Progress;
      readonly tolerance: number;
      readonly fitsOpen: number;
      readonly fitsTotal: number;
      /** Members whose older answer stands in, and the round it is of (null: the mean of the others stands in). */
      readonly standIns: readonly { readonly site: string; readonly round: number | null }[];
    }
  | {
      /** The run begins again, from the survey, without these members. */
      readonly kind: 'without';
      /** Rounds before it began again. */
      readonly round: number;
      readonly sites: readonly { readonly site: string; readonly rowsUsed: number | null }[];
    };

export type RunOutcome =
  | 'solved'
  | 'round-limit'
  | 'time-limit'
  | 'stalled'
  | 'site-missing'
  | 'refused'
  | 'infeasible'
  | 'unbounded'
  | 'cancelled'
  | 'broken';

export interface RunEnd {
  readonly outcome: RunOutcome;
  readonly reason: string | null;
  /** What the last round showed. */
  readonly shown: Shown | null;
  readonly result: ResultDocument;
}
