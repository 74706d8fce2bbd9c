import { describeFailure, type Failure } from '../../protocol/failure.js';
import { type ExitCode, exitCodeOf } from './exit-codes.js';

export const WIDTH_DEFAULT = 80;

/** `12,345`. */
export const grouped = (count: number): string => count.toLocaleString('en-US');

/** `1 row`, `12,345 rows`. */
export const counted = (count: number, one: string, many = `${one}s`): string =>
  `${grouped(count)} ${count === 1 ? one : many}`;

/** `under 1 ms`, `14 ms`, `0.25 s`, `4.2 s`, `38 s`, `12 min`. */
export function duration(ms: number): string {
  if (ms < 1) return 'under 1 ms';
  if (ms < 99.5) return `${Math.round(ms)} ms`;
  const seconds = ms / 1000;
  if (seconds < 0.995) return `${seconds.toFixed(2)} s`;
  if (seconds < 9.95) return `${seconds.toFixed(1)} s`;
  return seconds < 119.5 ? `${Math.round(seconds)} s` : `${Math.round(seconds / 60)} min`;
}

/** A paragraph in lines of at most `width` columns; lines after the first are indented. Words are never broken. */
export function wrapped(text: string, width: number, indent: number): string[] {
  const lines: string[] = [];
  let line = '';
  for (const word of text.split(' ')) {
    const pad = lines.length === 0 ? 0 : indent;
    if (line !== '' && pad + line.length + 1 + word.length > width) {
      lines.push(' '.repeat(pad) + line);
      line = word;
    } else line = line === '' ? word : `${line} ${word}`;
  }
  lines.push(' '.repeat(lines.length === 0 ? 0 : indent) + line);
  return lines;
}

/** Columns of a terminal; null where the stream is none, and lines stay whole for whoever reads them. */
export const widthOf = (stream: { isTTY?: boolean; columns?: number }): number | null =>
  stream.isTTY === true ? (stream.columns ?? WIDTH_DEFAULT) : null;

export function say(lines: readonly string[]): void {
  process.stdout.write(lines.map((line) => `${line}\n`).join(''));
}

/** One line to standard error, wrapped on a terminal. */
export function tell(text: string, indent = 2): void {
  const width = widthOf(process.stderr);
  const lines = width === null ? [text] : wrapped(text, width, indent);
  process.stderr.write(lines.map((line) => `${line}\n`).join(''));
}

/** Says each failure on standard error; the exit code is that of the first. */
export function giveUp(failures: readonly [Failure, ...Failure[]]): ExitCode {
  for (const failure of failures) tell(describeFailure(failure));
  return exitCodeOf(failures[0]);
}
