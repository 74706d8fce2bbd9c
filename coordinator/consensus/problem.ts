import type { Penalty } from '../../numerics/penalty.js';

/** What a consensus method is told about one problem: K sites, p solver columns. No names, no rows. */
export interface ConsensusProblem {
  readonly p: number;
  /** w_i = n_i / N per site, in roster order. */
  readonly siteWeights: readonly number[];
  readonly penalty: Penalty;
  /** z₀: the intercept-only fit, clipped to the bounds. */
  readonly start: Float64Array;
  /** Relative gap to certify. */
  readonly tolerance: number;
  readonly roundsMost: number;
  /** True where f is a quadratic (squared loss): its model is the function. */
  readonly quadratic: boolean;
  /**
   * True where rows may be without curvature (Huber's loss beyond its threshold): curvature at one point then says
   * little about curvature at another.
   */
  readonly curvatureMayVanish: boolean;
  /** A mean loss under this separates the classes: ln 2 / N for a logistic loss without weights or offset; null else. */
  readonly separatedBelow: number | null;
  /** Curvature matrices the strictest site lets leave; infinite for no limit. */
  readonly curvatureMost: number;
  /**
   * On the `curvature` rung, the trial points of a round at which curvature is asked: at all of them saves rounds, at
   * the first alone sends a third of the numbers.
   */
  readonly trialMatrices: 'all' | 'first';
  /** Directions along which curvature may be asked: in one ask, and in all. */
  readonly sketch: { readonly columns: number; readonly columnsMost: number };
  /** Of the random directions among them. */
  readonly seed: number;
}
