import type { Rung } from '../consensus/method.js';
import type { AfterSurvey, RunOutcome } from './run.js';

/** The round log, as JSON lines for programs; a terminal shows the same events as sentences. `at`: ISO 8601, UTC. */
export type LogEvent =
  | {
      readonly event: 'accepted';
      readonly run: string;
      readonly title: string;
      readonly digest: string;
      /** Sites named in the specification, or how many at least. */
      readonly sites: readonly string[] | { readonly least: number };
      /** The run whose coefficients it starts from, where it does. */
      readonly startFrom?: string;
      readonly at: string;
    }
  | { readonly event: 'waiting'; readonly sites: readonly string[]; readonly at: string }
  | {
      readonly event: 'site';
      readonly site: string;
      readonly change: 'connected' | 'lost';
      readonly at: string;
    }
  | {
      readonly event: 'survey';
      readonly rowsTotal: number;
      readonly coefficients: number;
      readonly rung: Rung;
      readonly rungReason: string;
      readonly sites: readonly {
        readonly site: string;
        readonly rowsUsed: number;
        readonly rowsDropped: number;
      }[];
      readonly notes: readonly string[];
      readonly tookMs: number;
      readonly at: string;
    }
  | RoundEvent
  | {
      /** Sites whose answer is not there at the deadline; they are asked again. */
      readonly event: 'late';
      readonly round: number;
      readonly sites: readonly string[];
      readonly waitedMs: number;
      readonly patienceLeftMs: number;
      readonly at: string;
    }
  | {
      /** Sites given up on: the fit begins again from the survey, without their rows. */
      readonly event: 'without';
      /** Rounds before it began again. */
      readonly round: number;
      readonly sites: readonly { readonly site: string; readonly rowsUsed: number | null }[];
      /** How long they were waited for. */
      readonly waitedMs: number;
      readonly at: string;
    }
  | {
      readonly event: 'resumed';
      readonly round: number;
      readonly at: string;
    }
  | {
      readonly event: 'outcome';
      readonly outcome: RunOutcome;
      readonly reason: string | null;
      readonly rounds: number;
      readonly relativeGap: number | null;
      readonly certificate: string | null;
      /** Sites that the run went on without. */
      readonly without: readonly string[];
      /** Where the result folder is, on the coordinator's machine. */
      readonly folder: string;
      readonly at: string;
    };

export interface RoundEvent {
  readonly event: 'round';
  /** `solve`, the choice between the fits, or what the report asks about the one chosen. */
  readonly stage: AfterSurvey;
  readonly round: number;
  readonly roundsMost: number;
  readonly rung: Rung;
  readonly purpose: string;
  readonly fitsOpen: number;
  readonly fitsTotal: number;
  readonly relativeGap: number | null;
  readonly gapMeasured: boolean;
  readonly tolerance: number;
  readonly primalResidual: number | null;
  readonly dualResidual: number | null;
  readonly objective: number | null;
  readonly tookMs: number;
  /** Sites whose older answer stands in for the one that is due, and the round it is of (null: not heard yet). */
  readonly standIns: readonly { readonly site: string; readonly round: number | null }[];
  readonly slowest: { readonly site: string; readonly ms: number } | null;
  /** Numbers sent by all sites and to all sites in this round. */
  readonly numbersUp: number;
  readonly numbersDown: number;
  readonly at: string;
}
