import { Command } from 'commander';
import { z } from 'zod';
import { counted, wrapped } from '../report/phrases.js';
import { acting, withTail } from './action.js';
import {
  type AnalystOptions,
  analystOf,
  ask,
  type RunSummary,
  runSummarySchema,
  withAnalyst,
} from './analyst.js';
import { EXIT } from './exit-codes.js';
import { say, sayEnding, sayJson, terminalOf } from './terminal.js';

export function runsCommand(): Command {
  const command = withAnalyst(
    new Command('runs')
      .description('say how each run of the coordinator stands')
      .option('--json', 'one JSON object a run instead of sentences'),
  ).action(acting(runs));
  return withTail(command, {
    examples: ['commonfit runs'],
    exits: [EXIT.unreachable, EXIT.unauthorised, EXIT.untrusted],
  });
}

async function runs(options: AnalystOptions & { json?: true }): Promise<number> {
  const json = options.json === true;
  const analyst = await analystOf(options);
  if (!analyst.ok) return sayEnding(analyst.ending, json);
  const reply = await ask(analyst.value, 'GET', '/v1/runs', z.object({ runs: z.array(runSummarySchema) }));
  if (!reply.ok) return sayEnding(reply.ending, json);
  if (json) for (const run of reply.value.runs) sayJson(run);
  else if (reply.value.runs.length === 0) say(['No run yet.']);
  else for (const run of reply.value.runs) say(runLines(run, terminalOf(process.stdout).width));
  return EXIT.ok;
}

/** A run in a sentence or two. */
export function runLines(run: RunSummary, width: number): string[] {
  const day = `${run.submittedAt.slice(0, 10)} ${run.submittedAt.slice(11, 16)} UTC`;
  const stand =
    run.state === 'waiting'
      ? 'is waiting for its sites'
      : run.state === 'running'
        ? run.round === 0
          ? 'is being surveyed'
          : `is in round ${run.round}`
        : `ended as ${run.outcome ?? 'unknown'} after ${counted(run.round, 'round')}`;
  const reason = run.reason === null ? '' : ` ${run.reason}`;
  return wrapped(`${run.run} “${run.title}” ${stand}; submitted ${day}.${reason}`, width, 2);
}
