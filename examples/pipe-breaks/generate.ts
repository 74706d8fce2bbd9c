import { mkdir, rm, writeFile } from 'node:fs/promises';
import { join, resolve } from 'node:path';
import { pathToFileURL } from 'node:url';
import { Command, InvalidArgumentError } from 'commander';
import { openEngine, sqlPath, sqlText } from '../../worker/source/duckdb.js';
import { fitSpecificationText, siteFileText } from './documents.js';
import { type Segment, segmentsOf, UTILITIES } from './segments.js';

interface ExampleOptions {
  /** Folder to write to; made if it is not there. */
  readonly out: string;
  /** WebSocket address of the coordinator, for the site files. */
  readonly url: string;
  readonly curvatureMost: number | 'any';
  readonly seed: number;
}

const TABLES: Readonly<Record<string, 'parquet' | 'jsonl' | 'csv'>> = {
  harrowmere: 'parquet',
  'lindell-bay': 'jsonl',
};

/** Writes the four utilities' tables and site files and the fit specification. The same options give the same rows. */
export async function writeExample(options: ExampleOptions): Promise<string[]> {
  await mkdir(options.out, { recursive: true });
  const files = ['breaks.fit.yaml'];
  await writeFile(join(options.out, 'breaks.fit.yaml'), fitSpecificationText());
  for (const utility of UTILITIES) {
    const kind = TABLES[utility.name] ?? 'csv';
    const table = { kind, file: `${utility.name}.${kind}` };
    await writeTable(segmentsOf(utility, options.seed), kind, join(options.out, table.file));
    const site = { site: utility.name, table, url: options.url, curvatureMost: options.curvatureMost };
    await writeFile(join(options.out, `${utility.name}.site.yaml`), siteFileText(site));
    files.push(table.file, `${utility.name}.site.yaml`);
  }
  return files;
}

async function writeTable(
  rows: readonly Segment[],
  kind: 'parquet' | 'jsonl' | 'csv',
  file: string,
): Promise<void> {
  if (kind === 'jsonl') return writeFile(file, rows.map((row) => `${JSON.stringify(row)}\n`).join(''));
  const header = Object.keys(rows[0]);
  // no value of this example needs quotes
  const lines = [header, ...rows.map((row) => Object.values(row))].map((line) => `${line.join(',')}\n`);
  if (kind === 'csv') return writeFile(file, lines.join(''));
  const text = `${file}.csv`;
  await writeFile(text, lines.join(''));
  const engine = await openEngine({ threads: 1 });
  try {
    await engine.connection.run(
      `copy (select * from read_csv(${sqlPath(text)})) to ${sqlText(file)} (format parquet)`,
    );
  } finally {
    engine.close();
    await rm(text);
  }
}

const curvatureMost = (text: string): number | 'any' =>
  text === 'any' ? 'any' : wholeNumber(text, 'a whole number, zero or more, or "any"');

const seedOf = (text: string): number => wholeNumber(text, 'a whole number, zero or more');

function wholeNumber(text: string, allowed: string): number {
  if (!/^\d{1,9}$/.test(text)) throw new InvalidArgumentError(`Allowed: ${allowed}.`);
  return Number(text);
}

async function main(): Promise<void> {
  const command = new Command('generate')
    .description('Writes the pipe-breaks example: tables and site files of four invented utilities.')
    .requiredOption('--out <folder>', 'folder to write to')
    .option('--url <address>', 'coordinator for the site files', 'ws://127.0.0.1:7443/v1/site')
    .option(
      '--curvature-most <count>',
      'curvature matrices a fit that each site lets leave',
      curvatureMost,
      3,
    )
    .option('--seed <number>', 'seed of the invented rows', seedOf, 1)
    .parse();
  const options = command.opts<ExampleOptions>();
  const files = await writeExample({ ...options, out: resolve(options.out) });
  process.stdout.write(`${options.out}: ${files.join(', ')}\n`);
}

if (import.meta.url === pathToFileURL(process.argv[1] ?? '').href) await main();
