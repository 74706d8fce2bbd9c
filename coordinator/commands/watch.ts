import { Command } from 'commander';
import { acting, withTail } from './action.js';
import { type AnalystOptions, analystOf, withAnalyst } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { watchRun } from './follow.js';
import { sayEnding } from './terminal.js';

export function watchCommand(): Command {
  const command = withAnalyst(
    new Command('watch')
      .description('show the round log of a run, from its start until it has ended')
      .argument('<run>', 'the id of the run, as `submit` and `runs` print it')
      .option('--json', 'the events as JSON lines instead of sentences'),
  ).action(acting(watch));
  return withTail(command, {
    examples: ['commonfit watch 20310504-101500-4f6c2a91'],
    exits: [EXIT.unreachable, EXIT.unauthorised, EXIT.untrusted, EXIT.notFound, EXIT.interrupted],
    outcomes: true,
    more: 'Ctrl-C ends the watching; the run goes on.',
  });
}

async function watch(run: string, options: AnalystOptions & { json?: true }): Promise<number> {
  const json = options.json === true;
  const analyst = await analystOf(options);
  return analyst.ok ? await watchRun(analyst.value, run, json) : sayEnding(analyst.ending, json);
}
