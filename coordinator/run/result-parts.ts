/** The parts of `result.json` beyond the fits: what was chosen, how sure it is, whether the sites agree, how well it fits. */

/** How one of several fits was chosen. */
export interface ChoiceDocument {
  readonly rule: 'minimum' | 'one-standard-error' | 'aic' | 'bic' | 'extended-bic';
  /** Index into `fits`. */
  readonly chosen: number;
  /** Index into `fits` of the smallest mean loss or criterion: differs from `chosen` under one-standard-error. */
  readonly minimum: number;
  readonly lambdas: readonly number[];
  /** Coefficients that are not zero, intercept not counted, per λ. */
  readonly nonzero: readonly number[];
  readonly crossValidation: CrossValidationDocument | null;
  /** Value of the criterion per λ; null with folds. */
  readonly criterion: readonly (number | null)[] | null;
}

export interface CrossValidationDocument {
  readonly folds: readonly { readonly fold: string; readonly rows: number }[];
  /** Mean loss per row (unit deviance) of each fold (outer) at each λ (inner), on the rows held out; null: not solved. */
  readonly foldLoss: readonly (readonly (number | null)[])[];
  /** Mean over folds, weighted by their rows, and its standard error, per λ. */
  readonly mean: readonly (number | null)[];
  readonly standardError: readonly (number | null)[];
}

export interface Interval {
  readonly estimate: number;
  readonly standardError: number;
  readonly lower: number;
  readonly upper: number;
}

/** `model`: inverse information times the dispersion; `hc0`, `hc1`: sandwich (Huber 1967; White 1980); the others clustered. */
export type CovarianceKind = 'model' | 'hc0' | 'hc1' | 'cluster' | 'cluster-g1' | 'site' | 'site-g1';

export interface CovarianceDocument {
  readonly kind: CovarianceKind;
  /** Names of rows and columns; `(intercept)` first where there is one. */
  readonly order: readonly string[];
  readonly covariance: readonly (readonly number[])[];
  readonly standardErrors: Readonly<Record<string, number>>;
  readonly clusters: number | null;
}

export interface CoefficientTest extends Interval {
  readonly name: string;
  readonly statistic: number;
  readonly pValue: number;
  /** Adjusted over all coefficients but the intercept: Holm (1979); Benjamini and Hochberg (1995). */
  readonly pHolm: number | null;
  readonly pBenjaminiHochberg: number | null;
}

export interface TermTest {
  readonly term: string;
  readonly coefficients: readonly string[];
  /** Likelihood-ratio statistic (F statistic where the dispersion is estimated). */
  readonly statistic: number;
  readonly degreesOfFreedom: number;
  readonly pValue: number;
  readonly pHolm: number;
  readonly pBenjaminiHochberg: number;
}

export interface InferenceDocument {
  /** Level of all intervals, 0.95. */
  readonly level: number;
  /** Reference distribution of the tests: Student's t with so many degrees of freedom, or the normal (null). */
  readonly degreesOfFreedom: number | null;
  readonly dispersion: { readonly kind: 'fixed' | 'residual' | 'pearson'; readonly value: number };
  /** The covariance that tests and intervals use. */
  readonly used: CovarianceKind;
  readonly covariances: readonly CovarianceDocument[];
  readonly coefficients: readonly CoefficientTest[];
  readonly terms: readonly TermTest[];
  readonly profile: readonly {
    readonly name: string;
    readonly lower: number | null;
    readonly upper: number | null;
  }[];
  /** De-biased estimates of a penalised fit. */
  readonly debiased: readonly (Interval & { readonly name: string; readonly pValue: number })[];
  /** Mean prediction with every row at that level, other columns as they are. */
  readonly marginalMeans: readonly (Interval & { readonly term: string; readonly level: string })[];
  /** Mean change of the prediction for one unit of the column more. */
  readonly marginalEffects: readonly (Interval & { readonly term: string; readonly unit: string | null })[];
  /** Plain sentences. */
  readonly cautions: readonly string[];
}

export interface SiteComparison {
  readonly site: string;
  readonly rowsUsed: number;
  /** Why the site's own fit is not there; null where it is. */
  readonly reason: string | null;
  /** The site's own fit, by coefficient name. */
  readonly own: Readonly<Record<string, Interval>> | null;
  /** Deviance of the site's rows under the common fit and under its own. */
  readonly devianceCommon: number | null;
  readonly devianceOwn: number | null;
  /** Share of the information on each coefficient that comes from this site. */
  readonly informationShare: Readonly<Record<string, number>>;
  /** The common fit without this site: coefficients and their change. */
  readonly leftOut: Readonly<
    Record<
      string,
      { readonly estimate: number; readonly change: number; readonly changeInStandardErrors: number | null }
    >
  > | null;
}

export interface Heterogeneity {
  readonly name: string;
  /** Sites whose own fit counts here. */
  readonly sites: number;
  /** Cochran's Q (1954), its degrees of freedom and p-value. */
  readonly q: number;
  readonly degreesOfFreedom: number;
  readonly pValue: number;
  /** Share, Higgins and Thompson (2002); τ² DerSimonian and Laird (1986). */
  readonly i2: number;
  readonly tau2: number;
  /** Inverse-variance average of the sites' own fits, and how far it lies from the common fit. */
  readonly average: Interval;
  readonly averageMinusCommon: number;
}

export interface ComparisonDocument {
  readonly sites: readonly SiteComparison[];
  readonly heterogeneity: readonly Heterogeneity[];
  /** Likelihood-ratio test of one common model against a model per site. */
  readonly commonModel: {
    readonly statistic: number;
    readonly degreesOfFreedom: number;
    readonly pValue: number;
  } | null;
  /** What it means and what to do, in words. */
  readonly words: readonly string[];
}

export interface FitQualityDocument {
  readonly deviance: number;
  readonly nullDeviance: number | null;
  readonly devianceExplained: number | null;
  /** Deviance per row on held-out rows at the chosen fit; null without folds. */
  readonly crossValidatedDeviance: number | null;
  /** Rows binned by prediction; cells under the least number of rows are left out and counted in `rowsSuppressed`. */
  readonly calibration: {
    readonly bins: readonly {
      readonly rows: number;
      readonly predicted: number;
      readonly observed: number;
    }[];
    readonly rowsSuppressed: number;
  } | null;
  /** Area under the ranking curve and the curve itself, from binned counts (logistic only). */
  readonly ranking: {
    readonly area: number;
    readonly curve: readonly { readonly falseShare: number; readonly trueShare: number }[];
  } | null;
  /** Pearson residuals by site. */
  readonly residuals: readonly {
    readonly site: string;
    readonly rows: number;
    readonly mean: number;
    readonly sd: number;
  }[];
  /** Leverage by site: mean over rows, the largest, and rows above twice the mean of all. */
  readonly leverage: readonly {
    readonly site: string;
    readonly mean: number;
    readonly most: number;
    readonly rowsHigh: number;
  }[];
  readonly pearsonDispersion: number;
  /** Counts: rows with zero, seen and expected under the fit. */
  readonly zeros: { readonly observed: number; readonly expected: number } | null;
  readonly words: readonly string[];
}

/** The name of a shared intercept among coefficients. */
export const INTERCEPT_NAME = '(intercept)';

/** The coefficients of an earlier run that this one started from. */
export interface StartedFromDocument {
  readonly run: string;
  /** Original scale; the intercept as `(intercept)`. */
  readonly coefficients: Readonly<Record<string, number>>;
  /** False where the method had no use for them, as a note says. */
  readonly used: boolean;
}

/** How the chosen or only fit differs from the one it was started from, by name of the coefficients that both have. */
export type MovedDocument = Readonly<
  Record<
    string,
    {
      readonly before: number;
      readonly after: number;
      readonly change: number;
      /** In standard errors of the new fit; null where there are none. */
      readonly changeInStandardErrors: number | null;
    }
  >
>;

/** A part of the report that is not there, and why. */
export interface OmittedPart {
  readonly part: string;
  readonly reason: string;
}
