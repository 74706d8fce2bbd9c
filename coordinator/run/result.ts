import type { Certificate, Rung } from '../consensus/method.js';
import type {
  ChoiceDocument,
  ComparisonDocument,
  FitQualityDocument,
  InferenceDocument,
  MovedDocument,
  OmittedPart,
  StartedFromDocument,
} from './result-parts.js';
import type { RunOutcome } from './run.js';

/**
 * `result.json`, format 1. Holds no time and no run id: the same specification, data and Node version give the same
 * bytes.
 */
export interface ResultDocument {
  readonly format: 1;
  readonly outcome: RunOutcome;
  readonly reason: string | null;
  readonly title: string;
  /** SHA-256 of the canonical specification, hex. */
  readonly specification: string;
  readonly software: string;
  readonly sites: readonly {
    readonly site: string;
    readonly rowsUsed: number | null;
    readonly rowsDropped: number | null;
    readonly kernel: string;
  }[];
  /** Members that the run was begun with and went on without (`missing: go-without`): their rows are not in the fit. */
  readonly without: readonly { readonly site: string; readonly rowsUsed: number | null }[];
  readonly rowsTotal: number | null;
  readonly rung: Rung | null;
  readonly rungReason: string | null;
  readonly tolerance: number;
  readonly fits: readonly FitDocument[];
  /** Index into `fits` of the fit that the run stands by: the only one, or the one chosen; null: none of several. */
  readonly chosen: number | null;
  readonly choice: ChoiceDocument | null;
  readonly inference: InferenceDocument | null;
  readonly comparison: ComparisonDocument | null;
  readonly fitQuality: FitQualityDocument | null;
  /** Parts that were asked for and are not there, and why. */
  readonly omitted: readonly OmittedPart[];
  /** The earlier run whose coefficients were given to start from; null: none were, or no fit was made. */
  readonly startedFrom: StartedFromDocument | null;
  /** What moved since then; null where no fit was chosen either. */
  readonly moved: MovedDocument | null;
  readonly notes: readonly string[];
  /** Rounds of the solve stage: set-up and certificate included, the survey not. */
  readonly rounds: number;
  /** Numbers (float64) per site: sent by it and received by it, survey included. */
  readonly numbersSent: readonly { readonly site: string; readonly up: number; readonly down: number }[];
}

export interface FitDocument {
  /** The fit's λ of each penalty in turn; null without a penalty. */
  readonly lambda: number | readonly number[] | null;
  readonly outcome: RunOutcome;
  readonly reason: string | null;
  readonly intercept: number | null;
  readonly coefficients: Readonly<Record<string, number>>;
  /** Columns without spread at any site: no coefficient. */
  readonly dropped: readonly string[];
  readonly objective: number;
  readonly loss: number;
  readonly penalty: number;
  readonly deviance: number;
  readonly certificate: Certificate | null;
  readonly rounds: number;
  readonly rung: Rung;
}
