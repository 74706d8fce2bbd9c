import type { Refusal, Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { Progress } from '../consensus/method.js';
import type { ResultDocument } from './result.js';

/**
 * A run: yields asks for all members of the roster, is sent what the barrier let through, and ends with one outcome.
 * It knows no clock, link or file; sockets, the simulator and a journal drive it alike.
 */
export type Run = Generator<RunAsk, RunEnd, RosterAnswers>;

/** One member of the roster: a site, or one shard of a large site. Order is fixed for the run. */
export interface Member {
  readonly site: string;
  readonly shard: { readonly index: number; readonly of: number };
  readonly kernel: string;
}

/** `harrowmere`, or `harrowmere#2` for the second of several shards. */
export const memberName = (member: Pick<Member, 'site' | 'shard'>): string =>
  member.shard.of === 1 ? member.site : `${member.site}#${member.shard.index}`;

export type Stage = 'survey' | 'solve' | 'certify';

export interface RunAsk {
  readonly stage: Stage;
  /** What each member is asked, in roster order, in full. */
  readonly works: readonly (readonly Work[])[];
  /** Known once the survey is pooled; members are prepared with it before this ask. */
  readonly scaling: Scaling | null;
  /** What the answers to the ask before have shown. */
  readonly shown: Shown | null;
}

/** In roster order: a member's answers, one per work item, or its refusal. */
export type RosterAnswers = readonly (readonly WorkAnswer[] | Refusal)[];

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
      /** 1-based, over the solve stage. */
      readonly round: number;
      readonly progress: Progress;
      readonly tolerance: number;
      readonly fitsOpen: number;
      readonly fitsTotal: number;
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
