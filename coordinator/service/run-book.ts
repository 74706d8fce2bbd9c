import { randomBytes } from 'node:crypto';
import { readdir } from 'node:fs/promises';
import { join, resolve } from 'node:path';
import { type Checked, type Failure, fail, succeed } from '../../protocol/failure.js';
import type { Answer, Refusal } from '../../protocol/messages/round.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { fileStore } from '../journal/file-store.js';
import { openJournal } from '../journal/journal.js';
import type { LogEvent } from '../run/log-event.js';
import type { Member, Run, RunEnd } from '../run/run.js';
import type { StartFrom } from '../run/start-from.js';
import { makeFolder, unwritableIfFails } from './files.js';
import type { HostTime, LinkedMember, Notice, Onlooker } from './host-parts.js';
import { keepReport } from './keep-report.js';
import {
  keepCancellation,
  keepResult,
  loggedIn,
  RUN_FILES,
  type RunEntry,
  type RunSummary,
  summaryOf,
} from './run-entry.js';
import { RunHost } from './run-host.js';
import { dropRun, type Intake, readRun, type Submission, writeNewRun } from './run-intake.js';
import type { RunLog } from './run-log.js';
import { startFromEntry } from './run-start.js';

export interface BookParts {
  readonly state: string;
  readonly runningMost: number;
  readonly waitingMost: number;
  readonly time: HostTime;
  readonly node: string;
  fit(
    specification: FitSpecification,
    digest: string,
    roster: readonly Member[],
    startFrom: StartFrom | null,
  ): Run;
  connected(): readonly LinkedMember[];
  notice(notice: Notice): void;
  readonly onlooker: Onlooker;
}

export type Submitted =
  | { readonly ok: true; readonly run: string; readonly digest: string }
  | { readonly ok: false; readonly failures: readonly Failure[] };

/** All runs of a state folder: accepts new ones, takes up unfinished ones, and hands links and messages to them. */
export class RunBook {
  private readonly entries = new Map<string, RunEntry>();
  private closing = false;
  /** Submissions that are being written down. */
  private accepting = 0;

  constructor(private readonly parts: BookParts) {}

  /** Reads the state folder and takes up every run without an outcome. */
  async recover(): Promise<Checked<null>> {
    const made = await makeFolder(this.runsFolder);
    if (!made.ok) return made;
    const names = await unwritableIfFails(this.runsFolder, () => readdir(this.runsFolder));
    if (!names.ok) return names;
    for (const name of names.value.sort()) {
      const taken = await this.recoverRun(name);
      if (!taken.ok) this.parts.notice({ level: 'error', ...taken.failure, run: name });
    }
    return succeed(null);
  }

  list(): RunSummary[] {
    return [...this.entries.values()].map(summaryOf);
  }

  find(run: string): RunEntry | null {
    return this.entries.get(run) ?? null;
  }

  /**
   * Accepts a specification, to start from the coefficients of the run `from` where one is named; once this gives a run,
   * the run survives a crash.
   */
  async submit(text: string, file: string, from: string | null = null): Promise<Submitted> {
    const parsed = parseFitSpecification(text, file);
    if (!parsed.ok) return parsed;
    if (this.count('waiting') + this.accepting >= this.parts.waitingMost) {
      const { failure } = fail('coordinator-full', `${this.parts.waitingMost} runs are waiting already.`, {
        remedy: 'Submit again when one of them has started, or cancel one.',
      });
      return { ok: false, failures: [failure] };
    }
    const start = from === null ? null : await startFromEntry(this.find(from), from, parsed.value);
    if (start !== null && !start.ok) return { ok: false, failures: [start.failure] };
    const startFrom = start?.value ?? null;
    const digest = digestOf(canonicalText(parsed.value));
    const submittedAt = new Date(this.parts.time.wallMs()).toISOString();
    const run = newRunId(submittedAt);
    this.accepting += 1;
    const submission = { text, specification: parsed.value, digest, startFrom, submittedAt };
    const accepted = await this.accept(run, submission).finally(() => {
      this.accepting -= 1;
    });
    return accepted.ok ? { ok: true, run, digest } : { ok: false, failures: [accepted.failure] };
  }

  /** Ends a run that has not ended; once this succeeds, the cancellation survives a crash. */
  async cancel(entry: RunEntry): Promise<Checked<null>> {
    if (entry.open === null) return succeed(null);
    const kept = await keepCancellation(entry.folder, new Date(this.parts.time.wallMs()).toISOString());
    if (!kept.ok) return kept;
    entry.open?.host.cancel();
    return succeed(null);
  }

  connected(linked: LinkedMember): void {
    for (const { open } of this.entries.values()) open?.host.connected(linked);
  }

  lost(linked: LinkedMember): void {
    for (const { open } of this.entries.values()) open?.host.lost(linked);
  }

  message(linked: LinkedMember, message: Answer | Refusal): void {
    const open = this.entries.get(message.run)?.open;
    if (open !== undefined && open !== null) {
      open.host.receive(linked, message);
      return;
    }
    const text = `A reply to ask ${message.ask} of run ${message.run}, which is not open, was dropped.`;
    this.parts.notice({ level: 'warn', code: 'answer-unasked', message: text, site: linked.member.site });
  }

  /** Why a run cannot go on although it should; null when all is well. */
  halted(): string | null {
    for (const { open } of this.entries.values()) {
      if (open?.host.state.state === 'halted') return open.host.state.reason;
    }
    return null;
  }

  /** Stops every open run where it stands; the next start takes it up. */
  async close(): Promise<void> {
    this.closing = true;
    for (const { open } of this.entries.values()) {
      if (open === null) continue;
      await open.host.close();
      open.log.close();
    }
  }

  private get runsFolder(): string {
    return resolve(this.parts.state, 'runs');
  }

  private async accept(run: string, submission: Submission): Promise<Checked<null>> {
    const written = await writeNewRun(this.runsFolder, run, submission);
    if (!written.ok) return written;
    const { entry, log, events } = written.value;
    for (const event of events) this.parts.onlooker.event(run, event);
    const opened = await this.openRun(written.value);
    if (!opened.ok) {
      log.close();
      await dropRun(entry.folder);
    }
    return opened;
  }

  private async recoverRun(run: string): Promise<Checked<null>> {
    const found = await readRun(this.runsFolder, run);
    if (!found.ok) return found;
    if (found.value.kind === 'open') {
      const { intake, cancelled } = found.value;
      const opened = await this.openRun(intake);
      if (opened.ok && cancelled) intake.entry.open?.host.cancel();
      return opened;
    }
    this.entries.set(run, found.value.entry);
    return found.value.kind === 'ended' ? succeed(null) : { ok: false, failure: found.value.failure };
  }

  private async openRun({ entry, specification, startFrom, log, events }: Intake): Promise<Checked<null>> {
    const store = await fileStore(join(entry.folder, RUN_FILES.journal));
    if (!store.ok) return store;
    const { parts } = this;
    const canonical = canonicalText(specification);
    const digest = digestOf(canonical);
    const host = new RunHost(
      {
        accepted: { run: entry.run, specification, canonical, digest, startFrom },
        start: (roster, from) => parts.fit(specification, digest, roster, from),
        journal: openJournal(store.value),
        time: parts.time,
        connected: () => parts.connected(),
        mayStart: () => this.count('running') < parts.runningMost,
        log: (event) => this.log(entry, log, event),
        notice: (notice) => parts.notice({ ...notice, run: entry.run }),
        answered: parts.onlooker.answered,
        keepResult: (end) => this.keep(entry, end, specification),
        logged: loggedIn(events),
        node: parts.node,
      },
      () => this.settle(entry),
    );
    entry.open = { host, log };
    this.entries.set(entry.run, entry);
    void host.open();
    return succeed(null);
  }

  /** Writes the result, then the report of it. */
  private async keep(
    entry: RunEntry,
    end: RunEnd,
    specification: FitSpecification,
  ): Promise<Checked<string>> {
    const kept = await keepResult(entry.folder, end, specification);
    if (!kept.ok) return kept;
    const { time, node, notice } = this.parts;
    const endedAt = new Date(time.wallMs()).toISOString();
    const report = await keepReport({ entry, specification, result: end.result, endedAt, node, notice });
    return report.ok ? kept : report;
  }

  /** A log with gaps would leave the tables of the result with gaps: the run stops, and says again what is missing. */
  private log(entry: RunEntry, log: RunLog, event: LogEvent): void {
    const kept = log.append(event);
    if (kept.ok) this.parts.onlooker.event(entry.run, event);
    else entry.open?.host.halt(kept.failure);
  }

  /** Lets go of a run that has ended and gives its place to those that wait, first come first served. */
  private settle(entry: RunEntry): void {
    const { open } = entry;
    if (open !== null && open.host.state.state === 'ended') {
      const { outcome, reason, round } = summaryOf(entry);
      entry.ended = { outcome, reason, round };
      entry.open = null;
      open.log.close();
      void open.host.close();
    }
    if (this.closing) return;
    for (const other of this.entries.values()) other.open?.host.poke();
  }

  private count(state: 'waiting' | 'running'): number {
    let count = 0;
    for (const { open } of this.entries.values()) if (open?.host.state.state === state) count += 1;
    return count;
  }
}

/** Sorts by time of submission: `20260301-093015-1f2e3d4c`. */
function newRunId(submittedAt: string): string {
  const [date, time] = submittedAt.slice(0, 19).replaceAll(/[-:]/g, '').split('T');
  return `${date}-${time}-${randomBytes(4).toString('hex')}`;
}
