import { writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import type { LogEvent } from '../run/log-event.js';
import { makePath } from '../service/files.js';
import type { Analyst } from './analyst.js';
import type { Document } from './document.js';
import { EXIT, exitCodeOf } from './exit-codes.js';
import { followRun, type OutcomeEvent, tellOfHalt } from './follow.js';
import { type LocalCoordinator, startLocalCoordinator } from './local-coordinator.js';
import { type Fetched, fetchResult } from './result-folder.js';
import { submitDocument } from './submit.js';
import { type Attempt, done, machineFault } from './terminal.js';
import { startWorker, tailOf, type WorkerProcess } from './worker-process.js';

/** One site of a run on this machine: its site file, and where that file says its token is. */
export interface LocalSite {
  readonly site: string;
  readonly siteFile: string;
  readonly tokenFile: string;
}

export interface LocalPlan {
  /** For the coordinator's state, the tokens and the workers' logs. */
  readonly folder: string;
  /** Makes the site files, once the coordinator's address (`ws://127.0.0.1:PORT`) is known. */
  readonly sites: (url: string) => Promise<Attempt<readonly LocalSite[]>>;
  /** What is fitted; read once the sites are there. */
  readonly document: () => Promise<Attempt<Document>>;
  readonly sink: (event: LogEvent) => void;
  readonly signal: AbortSignal;
}

export interface LocalRun {
  readonly outcome: OutcomeEvent;
  readonly result: Fetched;
  readonly events: readonly LogEvent[];
}

/**
 * One run on this machine over loopback sockets: a coordinator in this process, one worker process a site. However it
 * ends, nothing of it goes on: the workers are stopped and the coordinator closed before this returns.
 */
export async function runOnThisMachine(plan: LocalPlan): Promise<Attempt<LocalRun>> {
  const workers: WorkerProcess[] = [];
  const started = await startLocalCoordinator(join(plan.folder, 'coordinator'));
  if (!started.ok) return started;
  try {
    return await runWith(started.value, plan, workers);
  } finally {
    await Promise.all(workers.map((worker) => worker.stop()));
    await started.value.close();
  }
}

async function runWith(
  coordinator: LocalCoordinator,
  plan: LocalPlan,
  workers: WorkerProcess[],
): Promise<Attempt<LocalRun>> {
  const sites = await plan.sites(coordinator.siteUrl);
  if (!sites.ok) return sites;
  const document = await plan.document();
  if (!document.ok) return document;
  const died = new AbortController();
  const logs = join(plan.folder, 'logs');
  const made = await machineFault('The folder cannot be made', logs, () => makePath(logs));
  if (!made.ok) return made;
  for (const { site, siteFile, tokenFile } of sites.value) {
    const token = await coordinator.admitSite(site);
    if (!token.ok) return token;
    const written = await machineFault('The token cannot be written', tokenFile, () =>
      writeFile(tokenFile, `${token.value}\n`, { mode: 0o600 }),
    );
    if (!written.ok) return written;
    const ended = (name: string, how: string): void => died.abort({ name, how });
    workers.push(startWorker(site, siteFile, join(logs, `${site}.log`), ended));
  }
  const stop = AbortSignal.any([plan.signal, died.signal]);
  const run = await followed(coordinator.analyst, document.value, plan.sink, stop);
  if (plan.signal.aborted) return interrupted();
  return died.signal.aborted && !run.ok ? await workerEnded(died.signal.reason, workers) : run;
}

async function followed(
  analyst: Analyst,
  document: Document,
  sink: (event: LogEvent) => void,
  signal: AbortSignal,
): Promise<Attempt<LocalRun>> {
  const submitted = await submitDocument(analyst, document);
  if (!submitted.ok) return submitted;
  const events: LogEvent[] = [];
  const keep = (event: LogEvent): void => {
    events.push(event);
    sink(event);
  };
  const { run } = submitted.value;
  const halted = new AbortController();
  const over = new AbortController();
  void tellOfHalt(analyst, run, (reason) => halted.abort(reason), AbortSignal.any([signal, over.signal]));
  const end = await followRun(analyst, run, keep, AbortSignal.any([signal, halted.signal]));
  over.abort();
  if (end.kind === 'ending') return { ok: false, ending: end.ending };
  if (halted.signal.aborted && end.kind === 'stopped') return standstill(halted.signal.reason);
  if (end.kind === 'stopped') return interrupted();
  const result = await fetchResult(analyst, run);
  return result.ok ? done({ outcome: end.event, result: result.value, events }) : result;
}

/** Here nobody starts the coordinator again. */
const standstill = (reason: string): Attempt<never> => ({
  ok: false,
  ending: { exit: EXIT.machine, texts: [reason], failures: [{ code: 'state-unwritable', message: reason }] },
});

export const interrupted = (): Attempt<never> => ({
  ok: false,
  ending: {
    exit: EXIT.interrupted,
    texts: ['Interrupted: the workers and the coordinator are stopped.'],
    failures: [],
  },
});

async function workerEnded(
  reason: { name: string; how: string },
  workers: readonly WorkerProcess[],
): Promise<Attempt<never>> {
  const worker = workers.find(({ site }) => site === reason.name);
  const tail = worker === undefined ? [] : await tailOf(worker.logFile);
  return {
    ok: false,
    ending: {
      exit: exitCodeOf('site-missing', []),
      texts: [
        `The worker of ${reason.name} ended before the run did (${reason.how}). It last said:`,
        ...tail,
      ],
      failures: [
        {
          code: 'site-missing',
          message: `The worker of ${reason.name} ended before the run did (${reason.how}).`,
          where: { site: reason.name },
        },
      ],
    },
  };
}
