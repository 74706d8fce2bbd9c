import { readFile, rm } from 'node:fs/promises';
import { join } from 'node:path';
import { type Checked, type Failure, fail, succeed } from '../../protocol/failure.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { LogEvent } from '../run/log-event.js';
import type { StartFrom } from '../run/start-from.js';
import { makeFolder, syncFolder, unwritableIfFails, writeWhole } from './files.js';
import { isCancelled, RUN_FILES, type RunEntry } from './run-entry.js';
import { RunLog, readLog } from './run-log.js';
import { keepStart, readStart } from './run-start.js';

/** A specification as it was submitted, with its text. */
export interface Submission {
  readonly text: string;
  readonly specification: FitSpecification;
  readonly digest: string;
  readonly startFrom: StartFrom | null;
  readonly submittedAt: string;
}

/** A run whose folder is written, with its round log open and what the log holds. */
export interface Intake {
  readonly entry: RunEntry;
  readonly specification: FitSpecification;
  readonly startFrom: StartFrom | null;
  readonly log: RunLog;
  readonly events: readonly LogEvent[];
}

/** Writes the folder of a new run, durably; nothing of it stays where that fails. */
export async function writeNewRun(
  runsFolder: string,
  run: string,
  submission: Submission,
): Promise<Checked<Intake>> {
  const folder = join(runsFolder, run);
  const written = await writeFolder(runsFolder, folder, run, submission);
  // what the analyst is told was not accepted must not be taken up at the next start
  if (!written.ok) await dropRun(folder);
  return written;
}

export const dropRun = (folder: string): Promise<void> => rm(folder, { recursive: true, force: true });

async function writeFolder(
  runsFolder: string,
  folder: string,
  run: string,
  { text, specification, digest, startFrom, submittedAt }: Submission,
): Promise<Checked<Intake>> {
  const { title, sites } = specification;
  const made = await makeFolder(folder);
  if (!made.ok) return made;
  const named = await unwritableIfFails(runsFolder, () => syncFolder(runsFolder));
  if (!named.ok) return named;
  const kept = await writeWhole(join(folder, RUN_FILES.specification), text);
  if (!kept.ok) return kept;
  const start = await keepStart(folder, startFrom);
  if (!start.ok) return start;
  const log = await RunLog.open(join(folder, RUN_FILES.log));
  if (!log.ok) return log;
  const from = startFrom === null ? {} : { startFrom: startFrom.run };
  const accepted = { event: 'accepted', run, title, digest, sites, ...from, at: submittedAt } as const;
  const logged = log.value.append(accepted);
  if (!logged.ok) {
    log.value.close();
    return logged;
  }
  const entry: RunEntry = { run, title, digest, submittedAt, folder, open: null, ended: null };
  return succeed({ entry, specification, startFrom, log: log.value, events: [accepted] });
}

/** A run found in the state folder. */
export type Found =
  | { readonly kind: 'ended'; readonly entry: RunEntry }
  /** It cannot be taken up, because its specification is not understood any more. */
  | { readonly kind: 'lost'; readonly entry: RunEntry; readonly failure: Failure }
  | { readonly kind: 'open'; readonly intake: Intake; readonly cancelled: boolean };

/** Reads the folder of a run that was accepted before; its log stays open only where the run is to go on. */
export async function readRun(runsFolder: string, run: string): Promise<Checked<Found>> {
  const folder = join(runsFolder, run);
  const log = await RunLog.open(join(folder, RUN_FILES.log));
  if (!log.ok) return log;
  const found = await readFolder(folder, run, log.value);
  if (!found.ok || found.value.kind !== 'open') log.value.close();
  return found;
}

async function readFolder(folder: string, run: string, log: RunLog): Promise<Checked<Found>> {
  const events = await readLog(log.path);
  if (!events.ok) return events;
  const accepted = events.value.find((event) => event.event === 'accepted');
  if (accepted === undefined)
    return fail('not-found', `Folder ${folder} is not of an accepted run and was left alone.`);
  const { title, digest, at } = accepted;
  const entry: RunEntry = { run, title, digest, submittedAt: at, folder, open: null, ended: null };
  const outcome = events.value.find((event) => event.event === 'outcome');
  if (outcome !== undefined) {
    entry.ended = { outcome: outcome.outcome, reason: outcome.reason, round: outcome.rounds };
    return succeed({ kind: 'ended', entry });
  }
  const file = join(folder, RUN_FILES.specification);
  const text = await unwritableIfFails(file, () => readFile(file, 'utf8'));
  if (!text.ok) return text;
  const cancelled = await isCancelled(folder);
  if (!cancelled.ok) return cancelled;
  const start = await readStart(folder);
  if (!start.ok) return start;
  const parsed = parseFitSpecification(text.value, file);
  if (parsed.ok) {
    const intake = { entry, specification: parsed.value, startFrom: start.value, log, events: events.value };
    return succeed({ kind: 'open', intake, cancelled: cancelled.value });
  }
  const [failure] = parsed.failures;
  entry.ended = { outcome: null, reason: `It cannot be taken up: ${failure.message}`, round: 0 };
  return succeed({ kind: 'lost', entry, failure });
}
