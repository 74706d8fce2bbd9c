import type { Penalty } from './penalty.js';

/** What a consensus method is told about one problem: K sites, p solver columns. No names, no rows. */
export interface ConsensusProblem {
  readonly p: number;
  /** w_i = n_i / N per site, in roster order. */
  readonly siteWeights: readonly number[];
  readonly penalty: Penalty;
  /** z₀: the intercept-only fit. */
  readonly start: Float64Array;
  /** Relative gap to certify. */
  readonly tolerance: number;
  readonly roundsMost: number;
  /** True where f is a quadratic (squared loss): its model is the function. */
  readonly quadratic: boolean;
  /** Curvature matrices the strictest site lets leave; infinite for no limit. */
  readonly curvatureMost: number;
}
