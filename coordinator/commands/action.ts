import type { Command } from 'commander';
import { wrapped } from '../report/phrases.js';
import { EXIT, exitCodeTable } from './exit-codes.js';
import { complain } from './terminal.js';

/** Runs a command's work and sets the exit code it returns; what it throws is a defect and is told as one. */
export function acting<A extends unknown[]>(
  work: (...args: A) => Promise<number>,
): (...args: A) => Promise<void> {
  return async (...args) => {
    try {
      process.exitCode = await work(...args);
    } catch (error) {
      const text = error instanceof Error ? (error.stack ?? error.message) : String(error);
      complain('This is a defect of commonfit, please report it with the lines below.');
      process.stderr.write(`${text}\n`);
      process.exitCode = EXIT.defect;
    }
  };
}

/** The tail of a command's `--help`: examples and the exit codes it can end with. */
export function withTail(
  command: Command,
  tail: { examples: readonly string[]; exits: readonly number[]; outcomes?: boolean; more?: string },
): Command {
  const more = tail.more === undefined ? '' : `\n${wrapped(tail.more, 80).join('\n')}\n`;
  const examples = tail.examples.map((example) => `  ${example}`).join('\n');
  const heading = tail.examples.length === 1 ? 'Example' : 'Examples';
  const exits = exitCodeTable([EXIT.ok, EXIT.defect, EXIT.usage, ...tail.exits], tail.outcomes ?? false);
  return command.addHelpText('after', `${more}\n${heading}:\n${examples}\n\nExit codes:\n${exits}`);
}
