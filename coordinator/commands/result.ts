import { Command } from 'commander';
import { resultText } from '../report/result-text.js';
import type { LogEvent } from '../run/log-event.js';
import { acting, withTail } from './action.js';
import { type AnalystOptions, analystOf, withAnalyst } from './analyst.js';
import { EXIT, exitCodeOf } from './exit-codes.js';
import { followRun } from './follow.js';
import { fetchResult, writeResultFolder } from './result-folder.js';
import { say, sayEnding, sayJson, terminalOf } from './terminal.js';

export function resultCommand(): Command {
  const command = withAnalyst(
    new Command('result')
      .description('show the result of a run that has ended: coefficients, certificate, what was sent')
      .argument('<run>', 'the id of the run')
      .option('--json', 'result.json as one line instead of words')
      .option('--out <folder>', 'write result.json, coefficients.csv and rounds.csv there as well'),
  ).action(acting(result));
  return withTail(command, {
    examples: [
      'commonfit result 20310504-101500-4f6c2a91',
      'commonfit result 20310504-101500-4f6c2a91 --out ./breaks-result',
    ],
    exits: [EXIT.unreachable, EXIT.unauthorised, EXIT.untrusted, EXIT.notFound, EXIT.machine],
    outcomes: true,
  });
}

interface ResultOptions extends AnalystOptions {
  readonly json?: true;
  readonly out?: string;
}

async function result(run: string, options: ResultOptions): Promise<number> {
  const json = options.json === true;
  const analyst = await analystOf(options);
  if (!analyst.ok) return sayEnding(analyst.ending, json);
  const fetched = await fetchResult(analyst.value, run);
  if (!fetched.ok) return sayEnding(fetched.ending, json);
  if (options.out !== undefined) {
    const events: LogEvent[] = [];
    const keep = (event: LogEvent): void => void events.push(event);
    const followed = await followRun(analyst.value, run, keep, new AbortController().signal);
    if (followed.kind === 'ending') return sayEnding(followed.ending, json);
    const written = await writeResultFolder(options.out, fetched.value, events);
    if (!written.ok) return sayEnding(written.ending, json);
  }
  if (json) sayJson(fetched.value.document);
  else say(resultText(fetched.value.document, terminalOf(process.stdout).width));
  return exitCodeOf(fetched.value.document.outcome);
}
