import type { FitSpecification } from '../../../protocol/specification/types.js';
import type { LogEvent, RoundEvent } from '../../run/log-event.js';
import type { FitDocument, ResultDocument } from '../../run/result.js';

/** All that the page is made of: equal input gives equal bytes. */
export interface ReportInput {
  readonly specification: FitSpecification;
  readonly result: ResultDocument;
  readonly events: readonly LogEvent[];
  readonly run: string;
  /** ISO 8601, UTC. */
  readonly submittedAt: string;
  readonly endedAt: string;
  /** Node's version at the coordinator; null: not known. */
  readonly node: string | null;
  /** The journal's file name and SHA-256, hex; null: not at hand. */
  readonly journal: { readonly file: string; readonly sha256: string } | null;
}

/** The fit the run stands by: the only one, or the one chosen; null: none. */
export function fitStoodBy({ fits, chosen }: ResultDocument): FitDocument | null {
  if (chosen !== null) return fits[chosen] ?? null;
  return fits.length === 1 ? (fits[0] ?? null) : null;
}

/** How exp of a coefficient is called; null where it says nothing (a response on its own scale). */
export function ratioName({ loss, offset }: FitSpecification): string | null {
  if (loss.kind === 'logistic') return 'odds ratio';
  if (loss.kind !== 'poisson') return null;
  return offset?.kind === 'exposure' ? 'rate ratio' : 'ratio of expected counts';
}

/** The rounds since the fit last began, each once, in order. */
export function roundsOf(events: readonly LogEvent[]): RoundEvent[] {
  const rounds = new Map<number, RoundEvent>();
  for (const event of events) {
    if (event.event === 'without') rounds.clear();
    if (event.event === 'round') rounds.set(event.round, event);
  }
  return [...rounds.values()].sort((a, b) => a.round - b.round);
}
