#!/usr/bin/env node
import { realpathSync } from 'node:fs';
import { availableParallelism } from 'node:os';
import { pathToFileURL } from 'node:url';
import { Command, InvalidArgumentError, Option } from 'commander';
import { KERNEL_NAMES } from '../numerics/kernels/kernel.js';
import { SOFTWARE } from '../protocol/version.js';
import { EXIT, type ExitCode, exitCodeTable } from './commands/exit-codes.js';
import { bytesOfSize } from './service/size.js';

/**
 * The custodian's command line. What a command does is imported when it runs, so that `--help` and a quick command do
 * not wait for what they do not use.
 */
export function program(): Command {
  const main = new Command('commonfit-worker')
    .description('Takes part in fits of a shared regression model with rows that stay on this machine.')
    .version(SOFTWARE)
    .showHelpAfterError('Say --help for what is allowed.')
    .exitOverride((error) => {
      process.exit(error.exitCode === 0 ? EXIT.ok : EXIT.usage);
    });
  for (const command of [
    joinCommand(),
    inspectCommand(),
    approveCommand(),
    splitCommand(),
    scoreCommand(),
    healthCommand(),
  ])
    main.addCommand(command.copyInheritedSettings(main));
  return main;
}

function joinCommand(): Command {
  const command = new Command('join')
    .summary('answer what the policy allows')
    .description('connect to the coordinator and answer what the policy allows, until stopped')
    .argument('<site-file>', 'where the rows are and what may leave: NAME.site.yaml')
    .option('--approvals <file>', 'approved specifications (default: NAME.approvals beside the site file)')
    .option('--once', 'leave after the first run that ends', false)
    .option('--plain-text', 'allow a ws:// address that is not this machine', false)
    .option('--json', 'log as JSON lines', false)
    .addOption(
      new Option(
        '--kernel <kernel>',
        'what computes over the rows (default: the fastest that this Node takes as it is)',
      ).choices(KERNEL_NAMES),
    )
    .addOption(
      new Option(
        '--threads <count>',
        'how many share the work on the rows; the answers are the same to the bit',
      )
        .default(1)
        .argParser(threadCount),
    )
    .addOption(
      new Option(
        '--memory <size>',
        'how much of the rows is kept in memory, such as 512MB; what is more goes to disk, beside the site file (default: all in memory)',
      ).argParser(memorySize),
    )
    .addOption(heartbeatOption('a file to write a sign of life into, for `commonfit-worker health`'))
    .action(
      acting(async (site: string, options) => {
        const { joinAndLeave } = await import('./commands/join.js');
        return joinAndLeave(site, options);
      }),
    );
  return withTail(command, {
    example: 'commonfit-worker join harrowmere.site.yaml',
    more: 'The log goes to standard error. What left is recorded in NAME.ledger beside the site file.\nSIGTERM or Ctrl-C finishes the answer in the making and leaves.',
    exits: [EXIT.document, EXIT.coordinator, EXIT.machine],
  });
}

function inspectCommand(): Command {
  const command = new Command('inspect')
    .summary('show what would be read and leave')
    .description('show what a specification would read here and what would leave; connects to nothing')
    .argument('<site-file>', 'NAME.site.yaml')
    .argument('<specification>', 'NAME.fit.yaml')
    .option('--approvals <file>', 'approved specifications (default: NAME.approvals beside the site file)')
    .option('--json', 'as one line of JSON', false)
    .action(
      acting(async (site: string, specification: string, options) => {
        const { inspect } = await import('./commands/inspect.js');
        return inspect(site, specification, options);
      }),
    );
  return withTail(command, {
    example: 'commonfit-worker inspect harrowmere.site.yaml breaks.fit.yaml',
    exits: [EXIT.document, EXIT.table, EXIT.policy],
  });
}

function approveCommand(): Command {
  const command = new Command('approve')
    .summary('let one specification in')
    .description('let one specification in, where the policy says "approvals: listed"')
    .argument('<site-file>', 'NAME.site.yaml')
    .argument('<what>', 'the specification, NAME.fit.yaml, or its digest')
    .option('--approvals <file>', 'approved specifications (default: NAME.approvals beside the site file)')
    .option('--json', 'as one line of JSON', false)
    .action(
      acting(async (site: string, what: string, options) => {
        const { approve } = await import('./commands/approve.js');
        return approve(site, what, options);
      }),
    );
  return withTail(command, {
    example: 'commonfit-worker approve harrowmere.site.yaml breaks.fit.yaml',
    exits: [EXIT.document, EXIT.machine],
  });
}

function splitCommand(): Command {
  const command = new Command('split')
    .summary('split a table into sites')
    .description('split one table into a file for each value of a column, to try things out')
    .argument('<table>', 'a .csv, .parquet or .jsonl file')
    .requiredOption('--by <column>', 'the column that says which site a row belongs to')
    .requiredOption('--out <folder>', 'where the parts go')
    .option('--json', 'the parts as one line of JSON: a list of {site, file, rows}', false)
    .action(
      acting(async (table: string, options) => {
        const { split } = await import('./commands/split.js');
        return split(table, options);
      }),
    );
  return withTail(command, {
    example: 'commonfit-worker split all-pipes.csv --by utility --out ./parts',
    exits: [EXIT.table, EXIT.machine],
  });
}

function scoreCommand(): Command {
  const command = new Command('score')
    .summary('compute predictions from a model')
    .description('compute predictions for the rows of a table from model.json; connects to nothing')
    .argument('<model>', 'model.json of a result folder')
    .argument('<table>', 'a .csv, .parquet or .jsonl file')
    .option(
      '--out <file>',
      'where the predictions go, .csv, .parquet or .jsonl (default: CSV to standard output)',
    )
    .option('--format <format>', 'csv, parquet or jsonl, where the name of the file does not say it')
    .option('--columns <names>', 'columns of the table to write as well, parted by commas (default: all)')
    .option(
      '--flag-rows',
      'write a row that cannot be scored without a prediction, and why, in "note"',
      false,
    )
    .option('--quiet', 'say nothing but errors', false)
    .action(
      acting(async (model: string, table: string, options) => {
        const { score } = await import('./commands/score.js');
        return score(model, table, options);
      }),
    );
  return withTail(command, {
    example: 'commonfit-worker score result/model.json pipes.parquet --out predicted.parquet',
    more: 'Adds "prediction" (the expected response) and "linear_predictor" to each row, in the order of the table.\nWithout --flag-rows the first row that cannot be scored ends the work, and nothing is written.\nA prediction is an estimate; decisions belong to licensed practice and local codes.',
    exits: [EXIT.document, EXIT.table, EXIT.machine, EXIT.flagged, EXIT.interrupted],
  });
}

function threadCount(text: string): number {
  const most = availableParallelism();
  const count = /^[0-9]+$/.test(text) ? Number(text) : 0;
  if (count >= 1 && count <= most) return count;
  const allowed =
    most === 1
      ? 'This machine lets the worker have one core: say 1.'
      : `Say a whole number from 1 to ${most}, the cores that this machine lets the worker have.`;
  throw new InvalidArgumentError(`${allowed} Without --threads one does the work.`);
}

function memorySize(text: string): number {
  const bytes = bytesOfSize(text);
  if (bytes.ok) return bytes.value;
  throw new InvalidArgumentError(`${bytes.failure.message} ${bytes.failure.remedy ?? ''}`);
}

const heartbeatOption = (description: string): Option =>
  new Option('--heartbeat <file>', description).env('COMMONFIT_HEARTBEAT_FILE');

function healthCommand(): Command {
  const command = new Command('health')
    .summary('say whether a worker here is alive')
    .description(
      'say whether the worker that writes its sign of life into a file is alive; for service managers',
    )
    .addOption(heartbeatOption('the file that `join --heartbeat` names').makeOptionMandatory())
    .action(
      acting(async ({ heartbeat }: { heartbeat: string }) => {
        const { isAlive } = await import('./service/heartbeat.js');
        const { giveUp, say } = await import('./commands/terminal.js');
        const alive = await isAlive(heartbeat);
        if (!alive.ok) {
          giveUp([alive.failure]);
          return EXIT.machine;
        }
        say(['Alive.']);
        return EXIT.ok;
      }),
    );
  return withTail(command, {
    example: 'commonfit-worker health --heartbeat /tmp/heartbeat',
    more: 'A worker that waits for its coordinator is alive; one that has not written for a minute is not.',
    exits: [EXIT.machine],
  });
}

/** Sets the exit code a command returns; what it throws is a defect and is told as one. */
function acting<A extends unknown[]>(work: (...args: A) => Promise<ExitCode>): (...args: A) => Promise<void> {
  return async (...args) => {
    try {
      process.exitCode = await work(...args);
    } catch (error) {
      const text = error instanceof Error ? (error.stack ?? error.message) : String(error);
      process.stderr.write(`This is a defect of commonfit-worker, please report it:\n${text}\n`);
      process.exitCode = EXIT.defect;
    }
  };
}

/** The tail of a command's `--help`: an example and the exit codes it can end with. */
function withTail(
  command: Command,
  tail: { readonly example: string; readonly more?: string; readonly exits: readonly ExitCode[] },
): Command {
  const more = tail.more === undefined ? '' : `\n${tail.more}\n`;
  const exits = exitCodeTable([EXIT.ok, EXIT.defect, EXIT.usage, ...tail.exits]);
  return command.addHelpText('after', `${more}\nExample:\n  ${tail.example}\n\nExit codes:\n${exits}`);
}

const started = process.argv[1];
if (started !== undefined && pathToFileURL(realpathSync(started)).href === import.meta.url)
  await program().parseAsync();
