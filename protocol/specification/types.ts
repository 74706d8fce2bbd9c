/**
 * A parsed and checked fit specification: every default filled in, every name resolved. What the YAML may hold is in
 * `schema.ts`; both sides compute with this form only.
 */
export interface FitSpecification {
  readonly title: string;
  /** Sites that must all take part, in roster order; or how many at least. */
  readonly sites: readonly string[] | { readonly least: number };
  readonly missing: 'refuse' | 'drop';
  readonly response: { readonly column: string; readonly positive: string | null };
  readonly loss: LossForm;
  /** Offset of the linear predictor: ln(exposure) or a column as it is. At most one. */
  readonly offset: { readonly kind: 'exposure' | 'offset'; readonly column: string } | null;
  readonly weights: { readonly column: string } | null;
  /** `per-site`: each site has its own, which never leaves it. */
  readonly intercept: 'shared' | 'per-site' | 'none';
  readonly terms: readonly Term[];
  /** They add up. Empty: no penalty. */
  readonly penalties: readonly Penalty[];
  /** How one of several fits is chosen; null: none is. */
  readonly choose: Choice | null;
  readonly report: ReportParts;
  readonly rounds: { readonly tolerance: number; readonly most: number; readonly rung: RungLimit };
  readonly barrier: {
    readonly deadlineMs: number;
    readonly quorum: number | 'all';
    readonly oldest: number;
    readonly patienceMs: number;
    readonly missing: 'stop' | 'go-without';
  };
}

/** By held-out loss over folds of the rows, or by an information criterion of the fits. */
export type Choice =
  | { readonly kind: 'folds'; readonly by: Folds; readonly rule: 'minimum' | 'one-standard-error' }
  | { readonly kind: 'criterion'; readonly criterion: 'aic' | 'bic' | 'extended-bic' };

/** Which rows are held out together: by a seeded hash of the row's number at its site, or by the values of a column. */
export type Folds =
  | { readonly kind: 'hash'; readonly folds: number; readonly seed: number }
  | { readonly kind: 'column'; readonly column: string };

/** What is computed of the chosen, or only, fit beside its coefficients. `sandwich` and `termTests` imply `covariance`. */
export interface ReportParts {
  readonly covariance: boolean;
  /** With sums of scores over the values of a column as well, where one is named. */
  readonly sandwich: { readonly cluster: string | null } | null;
  readonly termTests: boolean;
  /** Coefficients whose profile intervals are asked, in design order. */
  readonly profile: readonly string[];
  readonly debiased: boolean;
  readonly margins: boolean;
  readonly compareSites: boolean;
  readonly fitQuality: boolean;
}

/** A loss with what it needs; Huber's threshold is positive, in units of the response. */
export type LossForm =
  | { readonly kind: 'squared' | 'logistic' | 'poisson' }
  | { readonly kind: 'huber'; readonly threshold: number };
export type LossKind = LossForm['kind'];
export type RungLimit = 'highest' | 'pooled' | 'curvature' | 'sketched' | 'proximal';
export type Transform = 'none' | 'log' | 'sqrt' | { readonly power: number };

export type Term = NumericTerm | LevelsTerm | ProductTerm;
export interface NumericTerm {
  readonly kind: 'numeric';
  readonly column: string;
  readonly unit: string | null;
  readonly transform: Transform;
  /** Coefficient name: the column, `column^2` for a power; `log(column)`, `sqrt(column)` where another term has the bare name. */
  readonly name: string;
}
export interface LevelsTerm {
  readonly kind: 'levels';
  readonly column: string;
  /** As text; numbers in the YAML and in tables are compared by value. */
  readonly levels: readonly string[];
  /** The level without a coefficient; null keeps a coefficient for every level. */
  readonly baseline: string | null;
  readonly name: string;
}
/** Product of two or more terms: every combination of their coefficients, named `a:b`. */
export interface ProductTerm {
  readonly kind: 'product';
  readonly factors: readonly (NumericTerm | LevelsTerm)[];
  readonly name: string;
}

export interface Penalty {
  readonly kind: 'ridge' | 'lasso' | 'elastic-net';
  /** One fit for each; empty where there is a path. */
  readonly lambda: readonly number[];
  /** `count` values of λ, log-spaced from the least that zeroes every slope down to `ratio` times it; null: a list. */
  readonly path: { readonly count: number; readonly ratio: number } | null;
  /** Share of the ℓ₁ part: 0 ridge, 1 lasso. */
  readonly l1: number;
  /** true: penalises b_j · sd_j; false: b_j itself. */
  readonly scaled: boolean;
  /** Multiplier by term or coefficient name; 1 where absent. */
  readonly perTerm: Readonly<Record<string, number>>;
}

/** A coefficient of the design: its name, the term it comes from and the columns it multiplies. */
export interface DesignColumn {
  readonly name: string;
  /** Index into `terms`. */
  readonly term: number;
  /** The factors multiplied: a numeric column transformed, or the indicator of a level. */
  readonly factors: readonly (
    | { readonly kind: 'numeric'; readonly column: string; readonly transform: Transform }
    | { readonly kind: 'level'; readonly column: string; readonly level: string }
  )[];
}
