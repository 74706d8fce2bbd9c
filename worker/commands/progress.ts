import { grouped } from './terminal.js';

const EVERY_MS = 500;

export interface ProgressLine {
  /** So many rows have been computed. */
  seen(rows: number): void;
  /** Takes the line away. */
  end(): void;
}

/** One line on a terminal that is written over; nothing where the stream is none, or where work ends at once. */
export function progressOf(
  stream: { isTTY?: boolean; write(text: string): unknown },
  quiet: boolean,
): ProgressLine {
  let next = performance.now() + EVERY_MS;
  let shown = false;
  return {
    seen: (rows) => {
      if (quiet || stream.isTTY !== true || performance.now() < next) return;
      next = performance.now() + EVERY_MS;
      shown = true;
      stream.write(`\r${grouped(rows)} rows …\x1b[K`);
    },
    end: () => {
      if (shown) stream.write('\r\x1b[K');
      shown = false;
    },
  };
}
