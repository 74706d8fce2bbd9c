import { access } from 'node:fs/promises';
import { join } from 'node:path';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { handOverFiles } from '../report/hand-over.js';
import { fitToHandOver } from '../report/model-document.js';
import { coefficientsCsv, roundsCsv } from '../report/tables.js';
import type { LogEvent } from '../run/log-event.js';
import type { ResultDocument } from '../run/result.js';
import type { RunEnd } from '../run/run.js';
import { unwritableIfFails, writeWhole } from './files.js';
import type { Logged } from './host-parts.js';
import type { RunHost } from './run-host.js';
import { type RunLog, readLog } from './run-log.js';

/** A run as the service lists it. */
export interface RunSummary {
  readonly run: string;
  readonly title: string;
  readonly digest: string;
  readonly state: 'waiting' | 'running' | 'ended';
  readonly outcome: string | null;
  readonly reason: string | null;
  readonly round: number;
  readonly submittedAt: string;
  readonly folder: string;
}

/** One accepted run: what never changes, and its host while it is open. */
export interface RunEntry {
  readonly run: string;
  readonly title: string;
  readonly digest: string;
  readonly submittedAt: string;
  readonly folder: string;
  open: { readonly host: RunHost; readonly log: RunLog } | null;
  /** How it ended, or why it could not be taken up again. */
  ended: { readonly outcome: string | null; readonly reason: string | null; readonly round: number } | null;
}

export const RUN_FILES = {
  specification: 'specification.yaml',
  start: 'start.json',
  journal: 'journal',
  log: 'log.jsonl',
  cancelled: 'cancelled',
  result: 'result.json',
  coefficients: 'coefficients.csv',
  rounds: 'rounds.csv',
  report: 'report.html',
} as const;

export function summaryOf(entry: RunEntry): RunSummary {
  const { run, title, digest, submittedAt, folder, ended } = entry;
  const fixed = { run, title, digest, submittedAt, folder };
  if (ended !== null) return { ...fixed, state: ended.outcome === null ? 'waiting' : 'ended', ...ended };
  const state = entry.open?.host.state ?? { state: 'waiting' };
  switch (state.state) {
    case 'waiting':
      return { ...fixed, state: 'waiting', outcome: null, reason: null, round: 0 };
    case 'running':
      return { ...fixed, state: 'running', outcome: null, reason: null, round: state.round };
    case 'halted':
      return { ...fixed, state: 'running', outcome: null, reason: state.reason, round: state.round };
    case 'ended': {
      const { outcome, reason, result } = state.end;
      return { ...fixed, state: 'ended', outcome, reason, round: result.rounds };
    }
  }
}

/** The text of `result.json`. */
export const resultJson = (result: ResultDocument): string => `${JSON.stringify(result, null, 2)}\n`;

/** Writes the result files, each as a whole; with the model where one fit is the one to hand over. Gives the folder back. */
export async function keepResult(
  folder: string,
  end: RunEnd,
  specification: FitSpecification,
): Promise<Checked<string>> {
  const events = await readLog(join(folder, RUN_FILES.log));
  if (!events.ok) return events;
  const fit = fitToHandOver(end.result);
  const files = [
    ...(fit === null ? [] : handOverFiles(specification, end.result, fit)),
    [RUN_FILES.coefficients, coefficientsCsv(end.result)],
    [RUN_FILES.rounds, roundsCsv(events.value)],
    [RUN_FILES.result, resultJson(end.result)],
  ] as const;
  for (const [name, text] of files) {
    const kept = await writeWhole(join(folder, name), text);
    if (!kept.ok) return kept;
  }
  return succeed(folder);
}

/**
 * Keeps on stable storage that a run is to end as cancelled: what is told to an analyst must not be lost with the
 * records that come after it. `at`: ISO 8601.
 */
export const keepCancellation = (folder: string, at: string): Promise<Checked<null>> =>
  writeWhole(join(folder, RUN_FILES.cancelled), `${at}\n`);

export const isCancelled = (folder: string): Promise<Checked<boolean>> => {
  const file = join(folder, RUN_FILES.cancelled);
  return unwritableIfFails(file, async () => {
    try {
      await access(file);
      return true;
    } catch (error) {
      if ((error as NodeJS.ErrnoException).code === 'ENOENT') return false;
      throw error;
    }
  });
};

/** What a round log holds already, so that a run taken up again does not say it twice. */
export function loggedIn(events: readonly LogEvent[]): Logged {
  const logged = { surveys: 0, withouts: 0, round: 0 };
  for (const event of events) {
    if (event.event === 'survey') logged.surveys += 1;
    if (event.event === 'without') logged.withouts += 1;
    if (event.event === 'round') logged.round = Math.max(logged.round, event.round);
  }
  return logged;
}
