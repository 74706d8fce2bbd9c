import { Command } from 'commander';
import { acting, withTail } from './action.js';
import { type AnalystOptions, analystOf, ask, runSummarySchema, withAnalyst } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { runLines } from './runs.js';
import { say, sayEnding, sayJson, terminalOf } from './terminal.js';

export function cancelCommand(): Command {
  const command = withAnalyst(
    new Command('cancel')
      .description('end a run that has not ended yet; its journal and its log stay')
      .argument('<run>', 'the id of the run')
      .option('--json', 'one JSON object instead of words'),
  ).action(acting(cancel));
  return withTail(command, {
    examples: ['commonfit cancel 20310504-101500-4f6c2a91'],
    exits: [EXIT.unreachable, EXIT.unauthorised, EXIT.untrusted, EXIT.notFound],
  });
}

async function cancel(run: string, options: AnalystOptions & { json?: true }): Promise<number> {
  const json = options.json === true;
  const analyst = await analystOf(options);
  if (!analyst.ok) return sayEnding(analyst.ending, json);
  const path = `/v1/runs/${encodeURIComponent(run)}/cancel`;
  const reply = await ask(analyst.value, 'POST', path, runSummarySchema);
  if (!reply.ok) return sayEnding(reply.ending, json);
  if (json) sayJson(reply.value);
  else {
    const head = reply.value.state === 'ended' ? 'It has ended.' : 'It is told to end.';
    say([head, ...runLines(reply.value, terminalOf(process.stdout).width)]);
  }
  return EXIT.ok;
}
