import { once } from 'node:events';
import type { ServerResponse } from 'node:http';
import { LogReader, type RunLog } from './run-log.js';

/** How often a quiet stream says that it is alive. Milliseconds. */
const PULSE_MS = 15_000;

/**
 * Sends a round log as server-sent events (HTML Living Standard, section 9.2): from the line after `lastId`, then each
 * as it is written, to the outcome. The log's file is the buffer: a slow reader costs no memory. Ids are line numbers.
 */
export async function streamLog(
  response: ServerResponse,
  path: string,
  log: RunLog | null,
  lastId: number,
): Promise<void> {
  response.writeHead(200, { 'content-type': 'text/event-stream', 'cache-control': 'no-store' });
  response.flushHeaders();
  const bell = openBell(log, response);
  try {
    const reader = new LogReader(path);
    while (!response.destroyed) {
      const rung = bell.next();
      const lines = await reader.next();
      for (const { id, text } of lines) {
        if (id > lastId) await write(response, `id: ${id}\ndata: ${text}\n\n`);
        if (isOutcome(text)) return;
      }
      if (lines.length > 0) continue;
      if (log === null) return;
      if ((await rung) === 'pulse') await write(response, ': waiting\n\n');
    }
  } finally {
    bell.close();
    response.end();
  }
}

const isOutcome = (line: string): boolean => line.startsWith('{"event":"outcome"');

async function write(response: ServerResponse, text: string): Promise<void> {
  if (response.destroyed || response.write(text)) return;
  const gone = new AbortController();
  const stop = (): void => gone.abort();
  response.once('close', stop);
  try {
    await once(response, 'drain', { signal: gone.signal });
  } catch (error) {
    if (!gone.signal.aborted) throw error;
  } finally {
    response.off('close', stop);
  }
}

/** Rings when the log has grown, the reader has gone or the pulse is due. */
function openBell(log: RunLog | null, response: ServerResponse) {
  let ring: (why: 'grown' | 'pulse') => void = () => {};
  const grown = (): void => ring('grown');
  const unfollow = log?.follow(grown) ?? (() => {});
  const pulse = setInterval(() => ring('pulse'), PULSE_MS);
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
