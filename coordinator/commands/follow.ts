import { setTimeout as pause } from 'node:timers/promises';
import { z } from 'zod';
import { roundLog } from '../report/round-log.js';
import type { LogEvent } from '../run/log-event.js';
import { type Analyst, ask, runSummarySchema, send, unreachable } from './analyst.js';
import { eventCutter } from './event-stream.js';
import { EXIT, exitCodeOf } from './exit-codes.js';
import {
  type Attempt,
  complain,
  done,
  type Ending,
  say,
  sayEnding,
  sayJson,
  terminalOf,
} from './terminal.js';

/** Times a broken log is picked up again without anything new in between, and the longest pause before one. */
const TRIES_MOST = 12;
const PAUSE_FIRST_MS = 250;
const PAUSE_MOST_MS = 8_000;

export type OutcomeEvent = Extract<LogEvent, { event: 'outcome' }>;

/** How following a run ended: with its outcome, given up, or stopped by the user. */
export type Followed =
  | { readonly kind: 'outcome'; readonly event: OutcomeEvent }
  | { readonly kind: 'ending'; readonly ending: Ending }
  | { readonly kind: 'stopped' };

/** `event` names a kind of `LogEvent`; the rest is the coordinator's word. Unknown kinds are a newer coordinator's. */
const eventSchema = z.looseObject({
  event: z.enum(['accepted', 'waiting', 'site', 'survey', 'round', 'late', 'without', 'resumed', 'outcome']),
});

/** Hands every event of a run's log to `sink`, once, from the start, over as many connections as it takes. */
export async function followRun(
  analyst: Analyst,
  run: string,
  sink: (event: LogEvent) => void,
  signal: AbortSignal,
): Promise<Followed> {
  const place = { id: null as string | null };
  let failed = 0;
  while (!signal.aborted) {
    const before = place.id;
    const read = await readOnce(analyst, run, place, sink, signal);
    if (signal.aborted) break;
    if (read.ok && read.value !== null) return { kind: 'outcome', event: read.value };
    if (!read.ok && read.ending.exit !== EXIT.unreachable) return { kind: 'ending', ending: read.ending };
    failed = place.id === before ? failed + 1 : 1;
    if (failed > TRIES_MOST) {
      return { kind: 'ending', ending: read.ok ? brokenOff(analyst, run) : read.ending };
    }
    const waitMs = Math.min(PAUSE_MOST_MS, PAUSE_FIRST_MS * 2 ** (failed - 1));
    if (failed > 1) {
      complain(`The coordinator's log has broken off; trying again (${failed} of ${TRIES_MOST}).`);
    }
    await pause(waitMs, undefined, { signal }).catch(() => undefined);
  }
  return { kind: 'stopped' };
}

/** One connection; the outcome event if it came, null if the stream ended before it. */
async function readOnce(
  analyst: Analyst,
  run: string,
  place: { id: string | null },
  sink: (event: LogEvent) => void,
  signal: AbortSignal,
): Promise<Attempt<OutcomeEvent | null>> {
  const headers: Record<string, string> = { accept: 'text/event-stream' };
  if (place.id !== null) headers['last-event-id'] = place.id;
  const sent = await send(analyst, 'GET', `/v1/runs/${encodeURIComponent(run)}/log`, { headers, signal });
  if (!sent.ok) return sent;
  if (sent.value.body === null) return done(null);
  const cutter = eventCutter();
  try {
    for await (const piece of sent.value.body.pipeThrough(new TextDecoderStream())) {
      for (const { id, data } of cutter.push(piece)) {
        place.id = id;
        const event = logEventOf(data);
        if (event !== null) sink(event);
        if (event?.event === 'outcome') return done(event);
      }
    }
    return done(null);
  } catch (error) {
    return unreachable(analyst, error);
  }
}

function logEventOf(data: string): LogEvent | null {
  const parsed = eventSchema.safeParse(JSON.parse(data));
  return parsed.success ? (parsed.data as unknown as LogEvent) : null;
}

const brokenOff = (analyst: Analyst, run: string): Ending => ({
  exit: EXIT.unreachable,
  failures: [],
  texts: [`The coordinator at ${analyst.url} ends the log of ${run} before the run has an outcome.`],
});

/** A sink that shows the log on standard output: sentences, or one JSON object a line. `served`: see `RoundLogOptions`. */
export function logSink(json: boolean, served: boolean): (event: LogEvent) => void {
  if (json) return sayJson;
  const log = roundLog({ ...terminalOf(process.stdout), served });
  return (event) => say(log.linesFor(event));
}

/** How often a quiet run is looked at. Milliseconds. */
const LOOK_EVERY_MS = 2_000;

/** Tells why a run stands still, where the coordinator cannot write its files: its log cannot say that. Until `signal`. */
export async function tellOfHalt(
  analyst: Analyst,
  run: string,
  tell: (reason: string) => void,
  signal: AbortSignal,
): Promise<void> {
  let told: string | null = null;
  while (!signal.aborted) {
    await pause(LOOK_EVERY_MS, undefined, { signal }).catch(() => undefined);
    if (signal.aborted) return;
    const read = await ask(analyst, 'GET', `/v1/runs/${encodeURIComponent(run)}`, runSummarySchema);
    // Whether the coordinator answers at all, following the log finds out.
    if (signal.aborted || !read.ok) continue;
    const { state, reason } = read.value;
    const halted = state === 'ended' ? null : reason;
    if (halted !== null && halted !== told) tell(halted);
    told = halted;
  }
}

/** Follows a run for the user: Ctrl-C ends the watching, not the run. The exit code. */
export async function watchRun(analyst: Analyst, run: string, json: boolean): Promise<number> {
  const stop = new AbortController();
  const onInterrupt = (): void => stop.abort();
  process.once('SIGINT', onInterrupt);
  process.once('SIGTERM', onInterrupt);
  const over = new AbortController();
  const tell = (reason: string): void =>
    complain(`The run stands still until the coordinator is started again: ${reason}`);
  void tellOfHalt(analyst, run, tell, over.signal);
  try {
    const followed = await followRun(analyst, run, logSink(json, true), stop.signal);
    if (followed.kind === 'outcome') return exitCodeOf(followed.event.outcome, followed.event.without);
    if (followed.kind === 'ending') return sayEnding(followed.ending, json);
    complain(`You stopped watching; the run goes on. To come back: commonfit watch ${run}`);
    complain(`To end it: commonfit cancel ${run}`);
    return EXIT.interrupted;
  } finally {
    over.abort();
    process.removeListener('SIGINT', onInterrupt);
    process.removeListener('SIGTERM', onInterrupt);
  }
}
