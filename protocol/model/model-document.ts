import type { LossKind, Term } from '../specification/types.js';

/**
 * `model.json`, format 1: all that is needed to compute predictions for rows of a table, and where the coefficients come
 * from. It holds no row and nothing that `result.json` and the fit specification do not hold.
 *
 * linear predictor = intercept + Σ coefficient · design column + offset; prediction = inverse link of it.
 */
export interface ModelDocument {
  /** Version of the format. */
  readonly commonfitModel: 1;
  readonly title: string;
  /** SHA-256 of the canonical fit specification, hex. */
  readonly specification: string;
  /** What the model was fitted with. */
  readonly software: string;
  readonly sites: readonly string[];
  readonly rowsTotal: number | null;
  readonly fit: {
    /** Which fit of the run, from 1, and of how many. */
    readonly number: number;
    readonly of: number;
    readonly lambda: number | readonly number[] | null;
    /** `solved`, or why the coefficients are not those of the optimum. */
    readonly outcome: string;
    readonly certificate: { readonly kind: string; readonly relativeGap: number } | null;
  };
  readonly loss: LossKind;
  readonly inverseLink: InverseLink;
  readonly response: { readonly column: string; readonly positive: string | null };
  /** `exposure`: its natural logarithm is added to the linear predictor; `offset`: the column itself is. */
  readonly offset: { readonly kind: 'exposure' | 'offset'; readonly column: string } | null;
  /** Null: the model has none. */
  readonly intercept: number | null;
  /** As in the fit specification: columns with their units, transforms, levels, baselines and products. */
  readonly terms: readonly Term[];
  /** In the order of the design; those of 0 are here as well. Numbers are on the scale of the columns as they are. */
  readonly coefficients: readonly { readonly name: string; readonly value: number }[];
  /** Design columns without a coefficient: they had one value in every row of the fit. */
  readonly dropped: readonly string[];
  /** Covariance of the coefficients, where the run measured it; `(intercept)` first where there is one. */
  readonly covariance?: {
    readonly kind: string;
    readonly order: readonly string[];
    readonly matrix: readonly (readonly number[])[];
  };
}

/** Mean response from the linear predictor η: η, 1/(1 + e^−η) or e^η (McCullagh and Nelder 1989, §2.2.3). */
export type InverseLink = 'identity' | 'logistic' | 'exponential';

export const INVERSE_LINKS: Readonly<Record<LossKind, InverseLink>> = {
  squared: 'identity',
  huber: 'identity',
  logistic: 'logistic',
  poisson: 'exponential',
};

/** The text of `model.json`. */
export const modelText = (model: ModelDocument): string => `${JSON.stringify(model, null, 2)}\n`;
