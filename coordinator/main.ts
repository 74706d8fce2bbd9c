#!/usr/bin/env node
import { Command, CommanderError } from 'commander';
import { SOFTWARE } from '../protocol/version.js';
import { admitCommand } from './commands/admit.js';
import { cancelCommand } from './commands/cancel.js';
import { checkCommand } from './commands/check.js';
import { demoCommand } from './commands/demo.js';
import { EXIT } from './commands/exit-codes.js';
import { healthCommand } from './commands/health.js';
import { rehearseCommand } from './commands/rehearse.js';
import { replayCommand } from './commands/replay.js';
import { reportCommand } from './commands/report.js';
import { resultCommand } from './commands/result.js';
import { runsCommand } from './commands/runs.js';
import { serveCommand } from './commands/serve.js';
import { submitCommand } from './commands/submit.js';
import { watchCommand } from './commands/watch.js';

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

const commands = [
  checkCommand(),
  rehearseCommand(),
  serveCommand(),
  admitCommand(),
  submitCommand(),
  watchCommand(),
  runsCommand(),
  resultCommand(),
  reportCommand(),
  cancelCommand(),
  replayCommand(),
  healthCommand(),
  demoCommand(),
];
for (const command of [program, ...commands]) command.exitOverride();
for (const command of commands) program.addCommand(command);

process.stdout.on('error', outputFailed);
try {
  await program.parseAsync();
} catch (error) {
  if (!(error instanceof CommanderError)) throw error;
  // The library has said what is wrong; asking for help or the version is no error.
  const asked = error.code === 'commander.helpDisplayed' || error.code === 'commander.version';
  process.exitCode = asked ? EXIT.ok : EXIT.usage;
}
