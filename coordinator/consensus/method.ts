import type { Want } from '../../protocol/messages/evaluate.js';

/**
 * A consensus method as a generator for one problem: it yields what it wants of all sites, is sent their answers in
 * roster order, and returns the point it stands by. It knows no clock, link or message; K sites, p coefficients.
 */
export type Method = Generator<MethodAsk, MethodEnd, SiteAnswers>;

export type MethodAsk = (
  | {
      readonly kind: 'proximal';
      /** v_i per site. */
      readonly centers: readonly Float64Array[];
      /** M_i = scales[i] · diag(diagonal). */
      readonly scales: readonly number[];
      readonly diagonal: Float64Array;
      /** Where each site's solver starts: its last point, or the centre in the first round. */
      readonly starts: readonly Float64Array[];
    }
  | {
      readonly kind: 'evaluate';
      readonly points: readonly { readonly point: Float64Array; readonly want: Want }[];
      readonly ownFit: { readonly at: number; readonly hold: number } | null;
      readonly sketch: SketchAsk | null;
    }
  | { readonly kind: 'factor' }
) & {
  /** What the answers so far have shown; becomes the round log's line for the round before. */
  readonly progress: Progress;
};

/** Asks for H_i(point) S at the point numbered `at`: directions of p numbers, one after the other. */
export interface SketchAsk {
  readonly at: number;
  readonly directions: Float64Array;
  readonly columns: number;
}

export type SiteAnswers =
  | { readonly kind: 'proximal'; readonly points: readonly Float64Array[] }
  | { readonly kind: 'evaluate'; readonly sites: readonly SiteEvaluation[] }
  | { readonly kind: 'factor'; readonly factors: readonly Float64Array[] };

/** One site's quadratic answer; curvature as a packed lower triangle (`numerics/packed`). */
export interface SiteEvaluation {
  readonly points: readonly {
    readonly value: number;
    readonly gradient: Float64Array | null;
    readonly diagonal: Float64Array | null;
    readonly curvature: Float64Array | null;
  }[];
  readonly ownFit: { readonly curvature: Float64Array; readonly linear: Float64Array } | null;
  readonly sketch: Float64Array | null;
}

export interface Progress {
  readonly rung: Rung;
  /** What this ask is for, in words fit for the round log: `proximal points`, `certificate`, … */
  readonly purpose: string;
  /** Normalised primal and dual residuals, where the rung has them. */
  readonly primalResidual: number | null;
  readonly dualResidual: number | null;
  /** Best knowledge of the relative gap F(z)/F* − 1; measured, or a guess from the residuals. */
  readonly relativeGap: number | null;
  readonly gapMeasured: boolean;
  readonly objective: number | null;
}

export type Rung = 'pooled' | 'curvature' | 'sketched' | 'proximal';

/** The numbers that show, independently of the iteration, how far z can be from the optimum. */
export interface Certificate {
  /**
   * `measured`: decrement under the curvature measured at z; `sketched`: under a model of it learned from products with
   * directions; `estimate`: from gradients and diagonal curvature, or from one or two directions a round.
   */
  readonly kind: 'measured' | 'sketched' | 'estimate' | 'duality-gap';
  /** Bound on F(z) − F*, safety factor included, and the same over |F(z)|. */
  readonly gap: number;
  readonly relativeGap: number;
  /** Largest entry of the least-norm element of ∇f(z) + ∂g(z), solver scale. */
  readonly kkt: number;
}

export interface MethodEnd {
  readonly outcome: 'solved' | 'round-limit' | 'stalled' | 'refused' | 'infeasible' | 'unbounded' | 'broken';
  /** `rank-deficient`, `separable`, or a sentence. */
  readonly reason: string | null;
  /** Solver columns the reason is about. */
  readonly columnsAtFault: readonly number[];
  /**
   * The point the method stands by. Where curvature certified a point, this is one model step beyond it: the same
   * answers give both, and the step is far nearer to the optimum than the certificate tells.
   */
  readonly z: Float64Array;
  /** f(z) (the mean loss; by the model, after a model step) and g(z). */
  readonly loss: number;
  readonly penalty: number;
  readonly certificate: Certificate | null;
  /** Pooled curvature at z (packed), where the rung measured it: what standard errors need. */
  readonly curvature: Float64Array | null;
  /** Asks made, set-up and certificate included. */
  readonly rounds: number;
  readonly rung: Rung;
}
