import { Command } from 'commander';
import { acting, withTail } from './action.js';
import { type AnalystOptions, analystOf, withAnalyst } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { watchRun } from './follow.js';
import { complain, sayEnding } from './terminal.js';
import { watchAll } from './watch-all.js';

export function watchCommand(): Command {
  const command = withAnalyst(
    new Command('watch')
      .description('show the round log of a run, from its start until it has ended')
      .argument('[run]', 'the id of the run, as `submit` and `runs` print it')
      .option('--all', 'every run that has not ended, those submitted meanwhile too, until none is left')
      .option('--json', 'the events as JSON lines instead of sentences'),
  ).action(acting(watch));
  return withTail(command, {
    examples: ['commonfit watch 20310504-101500-4f6c2a91', 'commonfit watch --all'],
    exits: [EXIT.unreachable, EXIT.unauthorised, EXIT.untrusted, EXIT.notFound, EXIT.interrupted],
    outcomes: true,
    more: "With --all each line begins with the end of its run's id, and the exit code is that of the first run that did not end as solved. Ctrl-C ends the watching; the run goes on.",
  });
}

interface WatchOptions extends AnalystOptions {
  readonly all?: true;
  readonly json?: true;
}

async function watch(run: string | undefined, options: WatchOptions): Promise<number> {
  const json = options.json === true;
  if ((run === undefined) !== (options.all === true)) {
    complain('Name one run, or say --all.');
    return EXIT.usage;
  }
  const analyst = await analystOf(options);
  if (!analyst.ok) return sayEnding(analyst.ending, json);
  return run === undefined ? await watchAll(analyst.value, json) : await watchRun(analyst.value, run, json);
}
