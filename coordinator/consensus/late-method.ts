import type { Want } from '../../protocol/messages/evaluate.js';
import type { MethodEnd, Progress, SiteEvaluation } from './method.js';

/**
 * A consensus method that need not hear all sites in every round: it says whom it asks what and for whom it waits, and
 * is sent whatever has come when the barrier opens. Which replies come together, and the times, are its only input
 * beside the replies, so that a record of them replays it to the bit. It knows no clock.
 */
export type LateMethod = Generator<LateAsk, MethodEnd, LateAnswers>;

export interface LateAsk {
  /**
   * Per site, in roster order: what it is asked now, in place of anything it has not answered; null: nothing new (an
   * older ask of it may be open).
   */
  readonly posts: readonly (SitePost | null)[];
  /** Sites, asked now or before, without whose reply the barrier does not open. */
  readonly waitFor: readonly number[];
  /**
   * Replies, of the sites asked now, with which the barrier may open without the others after a time of grace (they
   * are then late). Where nobody is asked or waited for, the barrier opens at the first reply.
   */
  readonly quorum: number;
  readonly progress: Progress;
  /** Sites whose older answers stand in for the one that is due; for the round log. */
  readonly standIns: readonly StandIn[];
}

export interface StandIn {
  readonly site: number;
  /** The round whose answer stands in; null: the site has not been heard, and the mean of the others stands in. */
  readonly round: number | null;
}

export type SitePost =
  | { readonly kind: 'evaluate'; readonly point: Float64Array; readonly want: Want }
  | {
      readonly kind: 'proximal';
      readonly center: Float64Array;
      /** M_i = scale · diag(diagonal). */
      readonly scale: number;
      readonly diagonal: Float64Array;
      readonly start: Float64Array;
    }
  /** See `protocol/messages/joint`: curvature packed; the penalty's weights are the problem's. */
  | {
      readonly kind: 'joint';
      readonly start: Float64Array;
      readonly curvature: Float64Array;
      readonly linear: Float64Array;
    };

export interface LateAnswers {
  /** Per site: its answer to the newest thing it was asked; null: none has come yet. */
  readonly replies: readonly (SiteReply | null)[];
  /**
   * Per site: how long its reply took; of a site that owes one, how long it has been waited for, since the first ask
   * that it has not answered; 0 where neither. Milliseconds.
   */
  readonly agesMs: readonly number[];
}

export type SiteReply =
  | { readonly kind: 'evaluate'; readonly at: SiteEvaluation['points'][number] }
  | { readonly kind: 'proximal'; readonly point: Float64Array }
  | {
      readonly kind: 'joint';
      readonly start: SiteQuadratic;
      readonly point: Float64Array;
      readonly end: SiteQuadratic;
    };

/** φ, ∇φ and packed curvature at a point. */
export interface SiteQuadratic {
  readonly value: number;
  readonly gradient: Float64Array;
  readonly curvature: Float64Array;
}

/** The barrier as the specification words it. */
export interface LateBarrier {
  /** Sites whose replies end a round. */
  readonly quorum: number;
  /** Rounds that a site's answer may be old; a site that would be older is waited for. */
  readonly oldest: number;
  /** How long each site took to answer the survey, which tells the slow from the start. Milliseconds. */
  readonly agesMs: readonly number[];
}
