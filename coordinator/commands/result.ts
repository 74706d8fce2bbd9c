import { Command, Option } from 'commander';
import { z } from 'zod';
import type { Failure } from '../../protocol/failure.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { coefficientsLatex, coefficientsMarkdown } from '../report/coefficient-tables.js';
import { handOverFiles } from '../report/hand-over.js';
import { fitToHandOver, inferenceOf, isUsable } from '../report/model-document.js';
import { counted, listed } from '../report/phrases.js';
import { resultText } from '../report/result-text.js';
import type { LogEvent } from '../run/log-event.js';
import type { ResultDocument } from '../run/result.js';
import { acting, withTail } from './action.js';
import { type Analyst, type AnalystOptions, analystOf, ask, withAnalyst } from './analyst.js';
import { EXIT, exitCodeOf } from './exit-codes.js';
import { followRun } from './follow.js';
import { fetchReport } from './report.js';
import { fetchResult, writeResultFolder } from './result-folder.js';
import { type Attempt, complain, done, ending, say, sayEnding, sayJson, terminalOf } from './terminal.js';
import { verify } from './verify.js';

const TABLE_KINDS = ['markdown', 'latex'] as const;
const TABLES = { markdown: coefficientsMarkdown, latex: coefficientsLatex } as const;
const FITS_LISTED_MOST = 12;

export function resultCommand(): Command {
  const command = withAnalyst(
    new Command('result')
      .description('show the result of a run that has ended: coefficients, certificate, what was sent')
      .argument('<run>', 'the id of the run; with --verify, a folder too')
      .option('--json', 'result.json as one line instead of words')
      .option('--verify', 'recompute the certificates from the stored answers, off line, and compare')
      .option(
        '--out <folder>',
        'write result.json, tables, report.html and, of one fit, model.json and model.pmml there',
      )
      .addOption(
        new Option('--table <kind>', 'the coefficients of one fit as a table instead of words').choices(
          TABLE_KINDS,
        ),
      )
      .option('--fit <number>', 'which fit --table and model.json are of, from 1 (default: the one chosen)'),
  ).action(acting(result));
  return withTail(command, {
    examples: [
      'commonfit result 20310504-101500-4f6c2a91',
      'commonfit result 20310504-101500-4f6c2a91 --out ./breaks-result',
      'commonfit result 20310504-101500-4f6c2a91 --table markdown --fit 3',
      'commonfit result commonfit-state/runs/20310504-101500-4f6c2a91 --verify',
    ],
    exits: [
      EXIT.unreachable,
      EXIT.unauthorised,
      EXIT.untrusted,
      EXIT.notFound,
      EXIT.machine,
      EXIT.document,
      EXIT.differs,
    ],
    outcomes: true,
    more: 'With --verify, the run is made again from its journal and every fit checked beside that: the answers of all sites at its certified point are summed again, and objective, gradient and gap taken from them alone. It needs the journal, as replay does, and ends with 0 or 8 whatever the outcome of the run.',
  });
}

interface ResultOptions extends AnalystOptions {
  readonly json?: true;
  readonly verify?: true;
  readonly out?: string;
  readonly table?: (typeof TABLE_KINDS)[number];
  readonly fit?: string;
}

async function result(run: string, options: ResultOptions): Promise<number> {
  const json = options.json === true;
  if (options.verify === true) return verify(run, options, json);
  const analyst = await analystOf(options);
  if (!analyst.ok) return sayEnding(analyst.ending, json);
  const fetched = await fetchResult(analyst.value, run);
  if (!fetched.ok) return sayEnding(fetched.ending, json);
  const { document } = fetched.value;
  const fit = fitAsked(document, options.fit);
  if (!fit.ok) return sayEnding(fit.ending, json);
  if (options.out !== undefined) {
    const events: LogEvent[] = [];
    const keep = (event: LogEvent): void => void events.push(event);
    const followed = await followRun(analyst.value, run, keep, new AbortController().signal);
    if (followed.kind === 'ending') return sayEnding(followed.ending, json);
    const handOver = await handOverOf(analyst.value, run, document, fit.value);
    if (!handOver.ok) return sayEnding(handOver.ending, json);
    const report = await fetchReport(analyst.value, run);
    if (!report.ok) return sayEnding(report.ending, json);
    const files = [...handOver.value, ['report.html', report.value] as const];
    const written = await writeResultFolder(options.out, fetched.value, events, null, files);
    if (!written.ok) return sayEnding(written.ending, json);
    if (handOver.value.length === 0 && !json) complain(noModel(document));
  }
  if (options.table !== undefined) {
    if (fit.value === null) return sayEnding(ending(EXIT.usage, [noFit(document)]).ending, json);
    const of = document.fits[fit.value];
    process.stdout.write(TABLES[options.table](document.title, of, inferenceOf(document, fit.value)));
  } else if (json) sayJson(document);
  else say(resultText(document, terminalOf(process.stdout).width));
  return exitCodeOf(document.outcome, document.without);
}

/** Index of the fit that `--fit` names, or else of the one to hand over; null where there is none. */
function fitAsked(document: ResultDocument, asked: string | undefined): Attempt<number | null> {
  if (asked === undefined) return done(fitToHandOver(document));
  const fit = Number(asked) - 1;
  if (Number.isInteger(fit) && isUsable(document.fits[fit])) return done(fit);
  return ending(EXIT.usage, [noFit(document, asked)]);
}

function noFit({ fits }: ResultDocument, asked?: string): Failure {
  const usable = fits.flatMap((fit, at) => (isUsable(fit) ? [at + 1] : []));
  const which = usable.length === 0 ? 'no fit' : `the fits ${listed(usable.map(String), FITS_LISTED_MOST)}`;
  return {
    code: 'field-value',
    message:
      asked === undefined
        ? `The run has ${counted(fits.length, 'fit')} and none was chosen; ${which} ended with coefficients.`
        : `--fit is \`${asked}\`; ${which} ended with coefficients.`,
    remedy: usable.length === 0 ? 'Read the reason with `commonfit result`.' : 'Name one with --fit.',
  };
}

const noModel = (document: ResultDocument): string =>
  `No model.json was written. ${noFit(document).message} ${noFit(document).remedy}`;

/** What a fit is handed over with, made from the specification as the coordinator keeps it. */
async function handOverOf(
  analyst: Analyst,
  run: string,
  document: ResultDocument,
  fit: number | null,
): Promise<Attempt<readonly (readonly [string, string])[]>> {
  if (fit === null) return done([]);
  const path = `/v1/runs/${encodeURIComponent(run)}/specification`;
  const kept = await ask(analyst, 'GET', path, z.object({ specification: z.string() }));
  if (!kept.ok) return kept;
  const parsed = parseFitSpecification(kept.value.specification, `${run}/specification.yaml`);
  return parsed.ok
    ? done(handOverFiles(parsed.value, document, fit))
    : ending(EXIT.document, parsed.failures);
}
