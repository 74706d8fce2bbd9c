import { mkdir, mkdtemp, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { basename, extname, join, resolve } from 'node:path';
import { Command } from 'commander';
import { stringify } from 'yaml';
import { z } from 'zod';
import { LEAVE_KINDS } from '../../protocol/messages/survey.js';
import { listed } from '../report/phrases.js';
import { makePath } from '../service/files.js';
import { acting, withTail } from './action.js';
import { type Document, readDocument } from './document.js';
import { EXIT, exitCodeOf } from './exit-codes.js';
import { logSink } from './follow.js';
import { interruptible } from './interrupt.js';
import { interrupted, type LocalSite, runOnThisMachine } from './on-this-machine.js';
import { writeResultFolder } from './result-folder.js';
import { type Attempt, done, ending, machineFault, say, sayEnding } from './terminal.js';
import { runWorkerCommand } from './worker-process.js';

export function rehearseCommand(): Command {
  const command = new Command('rehearse')
    .description(
      'try a fit specification on this machine: one table is split into sites, each with a worker process of its own',
    )
    .argument('<specification>', 'the fit specification, NAME.fit.yaml')
    .requiredOption('--rows <table>', 'the table with the rows of all sites: .csv, .parquet or .jsonl')
    .requiredOption('--by <column>', 'the column that says which site a row belongs to')
    .requiredOption('--out <folder>', 'where the result goes')
    .option(
      '--keep',
      "keep the split tables, site files, workers' logs and coordinator's state, in <folder>/rehearsal",
    )
    .option('--json', 'the round log as JSON lines instead of sentences')
    .action(acting(rehearse));
  return withTail(command, {
    examples: ['commonfit rehearse breaks.fit.yaml --rows all-pipes.csv --by utility --out ./rehearsed'],
    exits: [EXIT.document, EXIT.machine, EXIT.interrupted],
    outcomes: true,
    more: 'The sites of a rehearsal have an open policy: it shows what a fit gives, not what custodians will allow.',
  });
}

interface RehearseOptions {
  readonly rows: string;
  readonly by: string;
  readonly out: string;
  readonly keep?: true;
  readonly json?: true;
}

async function rehearse(file: string, options: RehearseOptions): Promise<number> {
  const json = options.json === true;
  const read = await readDocument(file);
  if (!read.ok) return sayEnding(read.ending, json);
  const out = resolve(options.out);
  const folder = await workFolder(out, options.keep === true);
  if (!folder.ok) return sayEnding(folder.ending, json);
  try {
    return await interruptible((signal) => rehearseIn(folder.value, out, read.value, options, signal));
  } finally {
    if (options.keep !== true) await rm(folder.value, { recursive: true, force: true });
  }
}

async function rehearseIn(
  folder: string,
  out: string,
  document: Document,
  options: RehearseOptions,
  signal: AbortSignal,
): Promise<number> {
  const json = options.json === true;
  const run = await runOnThisMachine({
    folder,
    sites: (url) => splitIntoSites(url, folder, document, options, signal),
    document: async () => done(document),
    sink: logSink(json, false),
    signal,
  });
  if (!run.ok) return sayEnding(run.ending, json);
  const written = await writeResultFolder(out, run.value.result, run.value.events, run.value.outcome.folder);
  if (!written.ok) return sayEnding(written.ending, json);
  if (!json) say([`The result is in ${options.out}: result.json, coefficients.csv, rounds.csv, journal.`]);
  return exitCodeOf(run.value.outcome.outcome, run.value.outcome.without);
}

async function workFolder(out: string, keep: boolean): Promise<Attempt<string>> {
  try {
    if (!keep) return done(await mkdtemp(join(tmpdir(), 'commonfit-rehearsal-')));
    const folder = join(out, 'rehearsal');
    await makePath(out);
    await mkdir(folder);
    return done(folder);
  } catch (error) {
    return ending(EXIT.machine, [
      {
        code: 'state-unwritable',
        message: `The folder for the rehearsal cannot be made (${(error as NodeJS.ErrnoException).code ?? 'unknown'}).`,
        remedy: 'Name another --out, or remove the `rehearsal` folder of an earlier time.',
        where: { file: out },
      },
    ]);
  }
}

const splitSchema = z.array(z.object({ site: z.string(), file: z.string(), rows: z.number() }));

async function splitIntoSites(
  url: string,
  folder: string,
  document: Document,
  options: RehearseOptions,
  signal: AbortSignal,
): Promise<Attempt<readonly LocalSite[]>> {
  const tables = join(folder, 'sites');
  const args = ['split', resolve(options.rows), '--by', options.by, '--out', tables, '--json'];
  const split = await runWorkerCommand(args, signal);
  if (signal.aborted) return interrupted();
  if (split.code !== 0) {
    const exit = split.code === EXIT.machine ? EXIT.machine : EXIT.document;
    return { ok: false, ending: { exit, texts: linesOf(split.stderr), failures: [] } };
  }
  const parts = splitSchema.parse(JSON.parse(split.stdout));
  const { sites } = document.specification;
  const wanted = 'least' in sites ? parts : parts.filter(({ site }) => sites.includes(site));
  const absent = 'least' in sites ? [] : sites.filter((site) => !parts.some((part) => part.site === site));
  if (absent.length > 0) {
    return ending(EXIT.document, [
      {
        code: 'site-missing',
        message: `No row of ${options.rows} has ${options.by} ${listed(absent)}; the values are ${listed(
          parts.map(({ site }) => site),
          12,
        )}.`,
        remedy: 'Name the sites in the specification as that column does.',
        where: { file: document.file, field: 'sites' },
      },
    ]);
  }
  const made: LocalSite[] = [];
  for (const part of wanted) {
    const site = await writeSite(url, tables, part.site, resolve(tables, part.file));
    if (!site.ok) return site;
    made.push(site.value);
  }
  return done(made);
}

/** A site file with an open policy for one part of the table. */
async function writeSite(
  url: string,
  folder: string,
  site: string,
  table: string,
): Promise<Attempt<LocalSite>> {
  // The name of the part is fit for a file; a site's name as it stands in a table may not be.
  const name = basename(table, extname(table));
  const siteFile = join(folder, `${name}.site.yaml`);
  const tokenFile = join(folder, `${name}.token`);
  const format = { '.parquet': 'parquet', '.jsonl': 'jsonl' }[extname(table)] ?? 'csv';
  const text = stringify({
    'commonfit-site': 1,
    site,
    coordinator: { url, 'token-file': tokenFile },
    table: { [format]: table },
    policy: {
      columns: 'any',
      'rows-least': 1,
      leave: LEAVE_KINDS,
      'curvature-most': 'any',
      'numbers-most': 'any',
      'rounds-most': 'any',
      approvals: 'any',
    },
  });
  return machineFault('The site file cannot be written', siteFile, async () => {
    await writeFile(siteFile, text);
    return { site, siteFile, tokenFile };
  });
}

const linesOf = (text: string): string[] => text.split('\n').filter((line) => line.trim() !== '');
