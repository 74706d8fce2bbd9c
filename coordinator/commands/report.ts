import { writeFile } from 'node:fs/promises';
import { Command } from 'commander';
import { acting, withTail } from './action.js';
import { type Analyst, type AnalystOptions, analystOf, send, unreachable, withAnalyst } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { type Attempt, done, machineFault, say, sayEnding, sayJson } from './terminal.js';

export function reportCommand(): Command {
  const command = withAnalyst(
    new Command('report')
      .description('save the report of a run that has ended: one HTML file to open in a browser or to print')
      .argument('<run>', 'the id of the run')
      .option('--out <file>', 'where to write it (default: RUN.report.html)')
      .option('--json', 'one JSON object instead of a sentence'),
  ).action(acting(report));
  return withTail(command, {
    examples: [
      'commonfit report 20310504-101500-4f6c2a91',
      'commonfit report 20310504-101500-4f6c2a91 --out breaks.html',
    ],
    exits: [EXIT.unreachable, EXIT.unauthorised, EXIT.untrusted, EXIT.notFound, EXIT.machine],
    more: 'The coordinator shows the same page to a browser at /runs/RUN/report, after signing in at /sign-in.',
  });
}

interface ReportOptions extends AnalystOptions {
  readonly out?: string;
  readonly json?: true;
}

async function report(run: string, options: ReportOptions): Promise<number> {
  const json = options.json === true;
  const analyst = await analystOf(options);
  if (!analyst.ok) return sayEnding(analyst.ending, json);
  const page = await fetchReport(analyst.value, run);
  if (!page.ok) return sayEnding(page.ending, json);
  const file = options.out ?? `${run}.report.html`;
  const written = await machineFault('The report cannot be written', file, () => writeFile(file, page.value));
  if (!written.ok) return sayEnding(written.ending, json);
  if (json) sayJson({ event: 'report', run, file });
  else say([`The report is in ${file}.`]);
  return EXIT.ok;
}

/** The report of a run that has ended, as the coordinator keeps it. */
export async function fetchReport(analyst: Analyst, run: string): Promise<Attempt<string>> {
  const sent = await send(analyst, 'GET', `/runs/${encodeURIComponent(run)}/report`);
  if (!sent.ok) return sent;
  try {
    return done(await sent.value.text());
  } catch (error) {
    return unreachable(analyst, error);
  }
}
