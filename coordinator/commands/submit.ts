import { basename } from 'node:path';
import { Command } from 'commander';
import { z } from 'zod';
import { wrapped } from '../report/phrases.js';
import { acting, withTail } from './action.js';
import { type Analyst, type AnalystOptions, analystOf, ask, withAnalyst } from './analyst.js';
import { type Document, readDocument } from './document.js';
import { EXIT } from './exit-codes.js';
import { watchRun } from './follow.js';
import { type Attempt, say, sayEnding, sayJson, terminalOf } from './terminal.js';

export function submitCommand(): Command {
  const command = withAnalyst(
    new Command('submit')
      .description('check a fit specification and hand it to the coordinator as a new run')
      .argument('<specification>', 'the fit specification, NAME.fit.yaml')
      .option('--start-from <run>', 'begin the rounds at the coefficients of a run that has ended')
      .option('--watch', 'stay and show the round log until the run has ended')
      .option('--json', 'JSON lines instead of words'),
  ).action(acting(submit));
  return withTail(command, {
    examples: [
      'commonfit submit breaks.fit.yaml --watch',
      'commonfit submit breaks.fit.yaml --start-from 20310504-101500-4f6c2a91',
    ],
    exits: [
      EXIT.document,
      EXIT.unreachable,
      EXIT.unauthorised,
      EXIT.untrusted,
      EXIT.notFound,
      EXIT.interrupted,
    ],
    outcomes: true,
    more: 'Codes from 10 on, and 130, come only with --watch. With --start-from, coefficients are taken over by name (new ones begin at 0): where rows were added or a term changed, the fit takes fewer rounds, and its result says what moved. The optimum does not depend on it; its last digits may.',
  });
}

interface SubmitOptions extends AnalystOptions {
  readonly startFrom?: string;
  readonly watch?: true;
  readonly json?: true;
}

async function submit(file: string, options: SubmitOptions): Promise<number> {
  const json = options.json === true;
  const read = await readDocument(file);
  if (!read.ok) return sayEnding(read.ending, json);
  const analyst = await analystOf(options);
  if (!analyst.ok) return sayEnding(analyst.ending, json);
  const submitted = await submitDocument(analyst.value, read.value, options.startFrom);
  if (!submitted.ok) return sayEnding(submitted.ending, json);
  const { run, digest } = submitted.value;
  if (options.watch === true) return await watchRun(analyst.value, run, json);
  if (json) sayJson({ event: 'submitted', run, digest });
  else {
    const text = `Run ${run} is accepted. To follow it: commonfit watch ${run}`;
    say(wrapped(text, terminalOf(process.stdout).width, 2));
  }
  return EXIT.ok;
}

/** Hands a checked document to the coordinator; `startFrom`: a run whose coefficients it starts from. */
export const submitDocument = (
  analyst: Analyst,
  document: Document,
  startFrom?: string,
): Promise<Attempt<{ run: string; digest: string }>> =>
  ask(analyst, 'POST', '/v1/runs', z.object({ run: z.string(), digest: z.string() }), {
    specification: document.text,
    file: basename(document.file),
    ...(startFrom === undefined ? {} : { startFrom }),
  });
