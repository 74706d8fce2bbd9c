import { once } from 'node:events';
import type { ServerResponse } from 'node:http';
import { LogReader, type RunLog } from './run-log.js';

/** How often a quiet stream says that it is alive, and how much sooner than its reader's deadline. Milliseconds. */
const PULSE_MS = 15_000;
const PULSES_PER_DEADLINE = 3;

/**
 * Sends a round log as server-sent events (HTML Living Standard, section 9.2): from the line after `lastId`, then each
 * as it is written, to the outcome. The log's file is the buffer: a slow reader costs no memory. Ids are line numbers. A reader
 * that does not take an event within `readDeadlineMs` is cut off: `too-slow`.
 */
export async function streamLog(
  response: ServerResponse,
  path: string,
  log: RunLog | null,
  lastId: number,
  readDeadlineMs: number,
): Promise<'ended' | 'too-slow'> {
  response.writeHead(200, { 'content-type': 'text/event-stream', 'cache-control': 'no-store' });
  response.flushHeaders();
  const bell = openBell(log, response, Math.min(PULSE_MS, readDeadlineMs / PULSES_PER_DEADLINE));
  try {
    const reader = new LogReader(path);
    while (!response.destroyed) {
      const rung = bell.next();
      const lines = await reader.next();
      for (const { id, text } of lines) {
        const event = `id: ${id}\ndata: ${text}\n\n`;
        if (id > lastId && !(await write(response, event, readDeadlineMs))) return 'too-slow';
        if (isOutcome(text)) return 'ended';
      }
      if (lines.length > 0) continue;
      if (log === null) return 'ended';
      if ((await rung) === 'pulse' && !(await write(response, ': waiting\n\n', readDeadlineMs))) {
        return 'too-slow';
      }
    }
    return 'ended';
  } finally {
    bell.close();
    response.end();
  }
}

const isOutcome = (line: string): boolean => line.startsWith('{"event":"outcome"');

/** False where the reader has not taken it in time; the stream is broken off then. */
async function write(response: ServerResponse, text: string, readDeadlineMs: number): Promise<boolean> {
  if (response.destroyed || response.write(text)) return true;
  const gone = new AbortController();
  const late = AbortSignal.timeout(readDeadlineMs);
  const stop = (): void => gone.abort();
  response.once('close', stop);
  try {
    await once(response, 'drain', { signal: AbortSignal.any([gone.signal, late]) });
  } catch (error) {
    if (gone.signal.aborted) return true;
    if (!late.aborted) throw error;
    response.destroy();
    return false;
  } finally {
    response.off('close', stop);
  }
  return true;
}

/** Rings when the log has grown, the reader has gone or the pulse is due. */
function openBell(log: RunLog | null, response: ServerResponse, pulseMs: number) {
  let ring: (why: 'grown' | 'pulse') => void = () => {};
  const grown = (): void => ring('grown');
  const unfollow = log?.follow(grown) ?? (() => {});
  const pulse = setInterval(() => ring('pulse'), pulseMs);
  response.once('close', grown);
  return {
    /** Resolves at the next ring after this call. */
    next: (): Promise<'grown' | 'pulse'> =>
      new Promise((resolve) => {
        ring = resolve;
      }),
    close: (): void => {
      unfollow();
      clearInterval(pulse);
      response.off('close', grown);
    },
  };
}
