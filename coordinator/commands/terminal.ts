import type { Failure } from '../../protocol/failure.js';
import { describeFailure } from '../../protocol/failure.js';
import { wrapped } from '../report/phrases.js';
import { EXIT } from './exit-codes.js';

const WIDTH_DEFAULT = 80;

/** Columns and colour of a stream: 80 columns where it is no terminal; no colour there, or under NO_COLOR. */
export function terminalOf(stream: { isTTY?: boolean; columns?: number }): {
  width: number;
  colour: boolean;
} {
  const isTerminal = stream.isTTY === true;
  const columns = isTerminal ? (stream.columns ?? 0) : 0;
  const plain = (process.env.NO_COLOR ?? '') !== '' || process.env.TERM === 'dumb';
  return { width: columns > 0 ? columns : WIDTH_DEFAULT, colour: isTerminal && !plain };
}

/** Lines to standard output. */
export function say(lines: readonly string[]): void {
  for (const line of lines) process.stdout.write(`${line}\n`);
}

/** A paragraph to standard error, wrapped to its width. */
export function complain(text: string): void {
  for (const line of wrapped(text, terminalOf(process.stderr).width, 2)) process.stderr.write(`${line}\n`);
}

/** One value as one line of JSON to standard output. */
export function sayJson(value: unknown): void {
  process.stdout.write(`${JSON.stringify(value)}\n`);
}

/** How a command that could not do its work ends: what to say, and the exit code. */
export interface Ending {
  readonly exit: number;
  readonly texts: readonly string[];
  /** The same for programs (`--json`). */
  readonly failures: readonly Failure[];
}

export type Attempt<T> =
  | { readonly ok: true; readonly value: T }
  | { readonly ok: false; readonly ending: Ending };

export const done = <T>(value: T): Attempt<T> => ({ ok: true, value });

export const ending = (exit: number, failures: readonly Failure[]): { ok: false; ending: Ending } => ({
  ok: false,
  ending: { exit, failures, texts: failures.map(describeFailure) },
});

/** Says why a command ends, on standard error, and as a line of JSON on standard output where programs read. */
export function sayEnding(why: Ending, json: boolean): number {
  for (const text of why.texts) complain(text);
  if (json) sayJson({ event: 'failed', exit: why.exit, failures: why.failures });
  return why.exit;
}

/** The value of `action`; where the file system refuses, an ending that says what could not be done to which file. */
export async function machineFault<T>(
  what: string,
  file: string,
  action: () => Promise<T>,
): Promise<Attempt<T>> {
  try {
    return done(await action());
  } catch (error) {
    const code = (error as NodeJS.ErrnoException).code;
    if (code === undefined) throw error;
    return ending(EXIT.machine, [
      {
        code: 'state-unwritable',
        message: `${what} (${code}).`,
        remedy: 'Check the space and the rights of the folder.',
        where: { file },
      },
    ]);
  }
}
