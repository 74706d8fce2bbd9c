#!/usr/bin/env node
import { Command, CommanderError } from 'commander';
import { SOFTWARE } from '../protocol/version.js';
import { EXIT } from './commands/exit-codes.js';

/** A reader that has seen enough ends the program quietly; anything else that the output meets is told. */
function outputFailed({ code = 'unknown' }: NodeJS.ErrnoException): never {
  if (code !== 'EPIPE') {
    process.stderr.write(
      `The output cannot be written (${code}). Check the space where it goes. [state-unwritable]\n`,
    );
  }
  process.exit(code === 'EPIPE' ? EXIT.ok : EXIT.machine);
}

const program = new Command('commonfit')
  .description(
    'Fits one regression model over rows that stay at several sites.\nSites join with the command commonfit-worker.',
  )
  .version(SOFTWARE, '--version', 'name and version')
  .addHelpText(
    'after',
    '\nTo see it work on this machine: commonfit demo\nOptions and exit codes of a command: commonfit COMMAND --help',
  );

/** A command is imported when it is the one asked for, all where help may name any of them: the health check runs often. */
const COMMANDS: Readonly<Record<string, () => Promise<Command>>> = {
  check: async () => (await import('./commands/check.js')).checkCommand(),
  rehearse: async () => (await import('./commands/rehearse.js')).rehearseCommand(),
  serve: async () => (await import('./commands/serve.js')).serveCommand(),
  admit: async () => (await import('./commands/admit.js')).admitCommand(),
  submit: async () => (await import('./commands/submit.js')).submitCommand(),
  watch: async () => (await import('./commands/watch.js')).watchCommand(),
  runs: async () => (await import('./commands/runs.js')).runsCommand(),
  result: async () => (await import('./commands/result.js')).resultCommand(),
  report: async () => (await import('./commands/report.js')).reportCommand(),
  cancel: async () => (await import('./commands/cancel.js')).cancelCommand(),
  replay: async () => (await import('./commands/replay.js')).replayCommand(),
  health: async () => (await import('./commands/health.js')).healthCommand(),
  demo: async () => (await import('./commands/demo.js')).demoCommand(),
};

const asked = process.argv[2] ?? '';
const names = Object.hasOwn(COMMANDS, asked) ? [asked] : Object.keys(COMMANDS);
const commands = await Promise.all(names.map((name) => COMMANDS[name]()));
for (const command of [program, ...commands]) command.exitOverride();
for (const command of commands) program.addCommand(command);

process.stdout.on('error', outputFailed);
try {
  await program.parseAsync();
} catch (error) {
  if (!(error instanceof CommanderError)) throw error;
  // The library has said what is wrong; asking for help or the version is no error.
  const helped = error.code === 'commander.helpDisplayed' || error.code === 'commander.version';
  process.exitCode = helped ? EXIT.ok : EXIT.usage;
}
