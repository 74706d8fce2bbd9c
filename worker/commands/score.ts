import { createReadStream } from 'node:fs';
import { mkdtemp, realpath, rename, rm } from 'node:fs/promises';
import { availableParallelism, tmpdir } from 'node:os';
import { basename, dirname, extname, join } from 'node:path';
import { pipeline } from 'node:stream/promises';
import { type Checked, type Failure, fail, succeed } from '../../protocol/failure.js';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import { parseModel } from '../../protocol/model/parse-model.js';
import type { ScoreFormat } from '../score/score-relation.js';
import { type Scored, scoreTable } from '../score/score-table.js';
import { readDocument } from '../service/site-folder.js';
import { EXIT, type ExitCode } from './exit-codes.js';
import { progressOf } from './progress.js';
import { afterScore, beforeScore } from './score-text.js';
import { giveUp, tell } from './terminal.js';

export interface ScoreOptions {
  readonly out?: string;
  readonly format?: string;
  readonly columns?: string;
  readonly flagRows: boolean;
  readonly quiet: boolean;
}

/** DuckDB holds some tens of megabytes a thread. */
const THREADS_MOST = 4;
const FORMATS: Readonly<Record<string, ScoreFormat>> = {
  '.csv': 'csv',
  '.parquet': 'parquet',
  '.jsonl': 'jsonl',
  '.ndjson': 'jsonl',
};

/** Computes predictions for the rows of a table from `model.json`. Connects to nothing. */
export async function score(modelFile: string, table: string, options: ScoreOptions): Promise<ExitCode> {
  const plan = await planOf(modelFile, table, options);
  if (!plan.ok) return giveUp([plan.failure]);
  const { model, kind, format } = plan.value;
  if (!options.quiet) for (const line of beforeScore(model)) tell(line);
  const stop = new AbortController();
  const stopped = (): void => stop.abort();
  process.once('SIGINT', stopped).once('SIGTERM', stopped);
  const progress = progressOf(process.stderr, options.quiet);
  try {
    const scored = await intoPlace(options.out ?? null, async (path) =>
      scoreTable({
        model,
        table: { path: table, kind },
        out: { path, format },
        columns: options.columns?.split(',').map((name) => name.trim()) ?? null,
        flagRows: options.flagRows,
        threads: Math.min(THREADS_MOST, availableParallelism()),
        seen: progress.seen,
        signal: stop.signal,
      }),
    );
    progress.end();
    if (!scored.ok) return giveUp([scored.failure]);
    if (!options.quiet) for (const line of afterScore(model, scored.value, options)) tell(line);
    return scored.value.flagged > 0 ? EXIT.flagged : EXIT.ok;
  } finally {
    progress.end();
    process.off('SIGINT', stopped).off('SIGTERM', stopped);
  }
}

interface Plan {
  readonly model: ModelDocument;
  readonly kind: ScoreFormat;
  readonly format: ScoreFormat;
}

async function planOf(modelFile: string, table: string, options: ScoreOptions): Promise<Checked<Plan>> {
  const text = await readDocument(modelFile);
  if (!text.ok) return text;
  const model = parseModel(text.value, modelFile);
  if (!model.ok) return model;
  const kind = formatNamed(extname(table));
  if (kind === null)
    return fail('not-supported', 'A table to score is a .csv, .parquet, .jsonl or .ndjson file.', {
      where: { file: table },
      remedy: 'Rename or convert it.',
    });
  const { out } = options;
  const format = formatNamed(
    options.format === undefined ? (out === undefined ? '.csv' : extname(out)) : `.${options.format}`,
  );
  if (format === null)
    return fail('field-value', 'The format of the output is not known; known are csv, parquet and jsonl.', {
      ...(out === undefined ? {} : { where: { file: out } }),
      remedy: 'Give --out an ending .csv, .parquet or .jsonl, or name the format with --format.',
    });
  for (const input of [modelFile, table])
    if (out !== undefined && (await sameFile(out, input)))
      return fail('field-conflict', `The output would be written over ${input}.`, {
        where: { file: out },
        remedy: 'Name another file with --out.',
      });
  return succeed({ model: model.value, kind, format });
}

const formatNamed = (extension: string): ScoreFormat | null => FORMATS[extension.toLowerCase()] ?? null;

async function sameFile(one: string, other: string): Promise<boolean> {
  const [a, b] = await Promise.all([one, other].map((path) => realpath(path).catch(() => null)));
  return a !== null && a === b;
}

/**
 * Lets `work` write a draft, and puts it into place only once it is whole: a name beside the draft, or standard output
 * (null). Whatever happens, no draft stays.
 */
async function intoPlace(
  out: string | null,
  work: (draft: string) => Promise<Checked<Scored>>,
): Promise<Checked<Scored>> {
  const beside = out === null ? tmpdir() : dirname(out);
  let folder: string;
  try {
    folder = await mkdtemp(join(beside, `.${out === null ? 'commonfit-score' : basename(out)}.`));
  } catch (error) {
    return unwritable(error, out ?? beside);
  }
  try {
    const draft = join(folder, 'draft');
    const done = await work(draft);
    if (!done.ok) return done;
    if (out === null) await pipeline(createReadStream(draft), process.stdout, { end: false });
    else await rename(draft, out);
    return done;
  } catch (error) {
    if (!(error instanceof Error && 'code' in error)) throw error;
    return unwritable(error, out ?? 'standard output');
  } finally {
    await rm(folder, { recursive: true, force: true });
  }
}

const unwritable = (error: unknown, file: string): { readonly ok: false; readonly failure: Failure } =>
  fail(
    'state-unwritable',
    `The output cannot be written (${error instanceof Error && 'code' in error ? String(error.code) : String(error)}).`,
    { where: { file }, remedy: 'Check the folder, its rights and the space left.' },
  );
