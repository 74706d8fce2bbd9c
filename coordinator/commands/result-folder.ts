import { copyFile, mkdir, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { z } from 'zod';
import { coefficientsCsv, roundsCsv } from '../report/tables.js';
import type { LogEvent } from '../run/log-event.js';
import type { ResultDocument } from '../run/result.js';
import { RUN_FILES } from '../service/run-entry.js';
import { type Analyst, readReply, send, unreachable } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { type Attempt, done, ending } from './terminal.js';

const numbers = z.union([z.number(), z.array(z.number())]).nullable();
/** What the terminal shows of `result.json`, format 1; the rest passes through. */
const resultSchema = z.looseObject({
  format: z.literal(1),
  outcome: z.string(),
  reason: z.string().nullable(),
  title: z.string(),
  specification: z.string(),
  sites: z.array(z.looseObject({ site: z.string() })),
  fits: z.array(
    z.looseObject({
      lambda: numbers,
      intercept: z.number().nullable(),
      coefficients: z.record(z.string(), z.number()),
      dropped: z.array(z.string()),
    }),
  ),
  notes: z.array(z.string()),
  numbersSent: z.array(z.object({ site: z.string(), up: z.number(), down: z.number() })),
});

/** A result, and the very bytes of its `result.json`. */
export interface Fetched {
  readonly document: ResultDocument;
  readonly text: string;
}

/** Fetches the result of a run that has ended. */
export async function fetchResult(analyst: Analyst, run: string): Promise<Attempt<Fetched>> {
  const path = `/v1/runs/${encodeURIComponent(run)}/result`;
  const sent = await send(analyst, 'GET', path);
  if (!sent.ok) return sent;
  let text: string;
  try {
    text = await sent.value.text();
  } catch (error) {
    return unreachable(analyst, error);
  }
  const read = readReply(analyst, path, resultSchema, text);
  return read.ok ? done({ document: read.value as unknown as ResultDocument, text }) : read;
}

/**
 * Writes `result.json`, `coefficients.csv` and `rounds.csv` into a folder, made if it is not there; and, with the run's
 * own folder at hand, its journal and specification, so that `commonfit replay` can compute the run again.
 */
export async function writeResultFolder(
  folder: string,
  result: Fetched,
  events: readonly LogEvent[],
  runFolder: string | null = null,
): Promise<Attempt<null>> {
  try {
    await mkdir(folder, { recursive: true });
    await writeFile(join(folder, 'result.json'), result.text);
    await writeFile(join(folder, 'coefficients.csv'), coefficientsCsv(result.document));
    await writeFile(join(folder, 'rounds.csv'), roundsCsv(events));
    if (runFolder !== null) {
      for (const name of [RUN_FILES.journal, RUN_FILES.specification])
        await copyFile(join(runFolder, name), join(folder, name));
    }
    return done(null);
  } catch (error) {
    return ending(EXIT.machine, [
      {
        code: 'state-unwritable',
        message: `The result cannot be written (${(error as NodeJS.ErrnoException).code ?? 'unknown'}).`,
        where: { file: folder },
      },
    ]);
  }
}
