import { setTimeout as pause } from 'node:timers/promises';
import { z } from 'zod';
import { roundLog } from '../report/round-log.js';
import type { LogEvent } from '../run/log-event.js';
import { type Analyst, ask, type RunSummary, runSummarySchema } from './analyst.js';
import { EXIT, exitCodeOf } from './exit-codes.js';
import { type Followed, followRun } from './follow.js';
import { type Attempt, complain, type Ending, say, sayEnding, sayJson, terminalOf } from './terminal.js';

/** Logs followed at once: fewer than a coordinator allows one analyst. */
const FOLLOWED_MOST = 12;
const LOOK_EVERY_MS = 2_000;
/** Of the width of a terminal, what the name of the run takes. */
const PREFIX_WIDTH = 10;

/** What runs ended with, and those that are followed now. */
interface Watch {
  readonly analyst: Analyst;
  readonly json: boolean;
  readonly open: Map<string, Promise<void>>;
  readonly seen: Set<string>;
  exit: number;
  ending: Ending | null;
}

/** Follows every run that has not ended, until none is left or the user has seen enough. The exit code. */
export async function watchAll(analyst: Analyst, json: boolean): Promise<number> {
  const stop = new AbortController();
  const onInterrupt = (): void => stop.abort();
  process.once('SIGINT', onInterrupt);
  process.once('SIGTERM', onInterrupt);
  const watch: Watch = { analyst, json, open: new Map(), seen: new Set(), exit: EXIT.ok, ending: null };
  try {
    const listed = await lookUntilNoneIsLeft(watch, stop.signal);
    if (!listed.ok) return sayEnding(listed.ending, json);
    if (watch.ending !== null) return sayEnding(watch.ending, json);
    if (!stop.signal.aborted) return watch.exit;
    complain('You stopped watching; the runs go on. To come back: commonfit watch --all');
    return EXIT.interrupted;
  } finally {
    stop.abort();
    process.removeListener('SIGINT', onInterrupt);
    process.removeListener('SIGTERM', onInterrupt);
  }
}

async function lookUntilNoneIsLeft(watch: Watch, signal: AbortSignal): Promise<Attempt<null>> {
  const schema = z.object({ runs: z.array(runSummarySchema) });
  while (!signal.aborted && watch.ending === null) {
    const read = await ask(watch.analyst, 'GET', '/v1/runs', schema);
    // a coordinator that is started again: the logs that are followed know how long to wait for it
    if (!read.ok && (watch.open.size === 0 || read.ending.exit !== EXIT.unreachable)) return read;
    const runs = read.ok ? read.value.runs.filter(({ state }) => state !== 'ended') : [];
    begin(watch, runs, signal);
    if (watch.open.size === 0) {
      if (watch.seen.size === 0) say(watch.json ? [] : ['No run is under way.']);
      break;
    }
    const looked = pause(LOOK_EVERY_MS, undefined, { signal }).catch(() => undefined);
    await Promise.race([looked, Promise.all(watch.open.values())]);
  }
  return { ok: true, value: null };
}

function begin(watch: Watch, runs: readonly RunSummary[], signal: AbortSignal): void {
  for (const { run } of runs) {
    if (watch.seen.has(run) || watch.open.size >= FOLLOWED_MOST) continue;
    watch.seen.add(run);
    const sink = watch.json ? jsonSink(run) : prefixedSink(run);
    const followed = followRun(watch.analyst, run, sink, signal).then((end) => {
      watch.open.delete(run);
      settle(watch, end);
    });
    watch.open.set(run, followed);
  }
}

function settle(watch: Watch, end: Followed): void {
  if (end.kind === 'ending') watch.ending ??= end.ending;
  if (end.kind !== 'outcome') return;
  const exit = exitCodeOf(end.event.outcome, end.event.without);
  if (watch.exit === EXIT.ok) watch.exit = exit;
}

const jsonSink =
  (run: string) =>
  (event: LogEvent): void =>
    sayJson({ ...event, run });

/** Sentences, each line behind the part of the run's id that tells runs of one day apart. */
function prefixedSink(run: string): (event: LogEvent) => void {
  const { width, colour } = terminalOf(process.stdout);
  const log = roundLog({ width: width - PREFIX_WIDTH, colour, served: true });
  const prefix = (run.split('-').at(-1) ?? run).padEnd(PREFIX_WIDTH);
  return (event) => say(log.linesFor(event).map((line) => `${prefix}${line}`));
}
