import { copyFile, readdir, rm, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { z } from 'zod';
import { HAND_OVER_FILES } from '../report/hand-over.js';
import { coefficientsCsv, roundsCsv } from '../report/tables.js';
import type { LogEvent } from '../run/log-event.js';
import type { ResultDocument } from '../run/result.js';
import { makePath } from '../service/files.js';
import { RUN_FILES } from '../service/run-entry.js';
import { type Analyst, readReply, send, unreachable } from './analyst.js';
import { type Attempt, done, machineFault } from './terminal.js';

const numbers = z.union([z.number(), z.array(z.number())]).nullable();
/** What the terminal shows of `result.json`, format 1; the rest passes through. */
const resultSchema = z.looseObject({
  format: z.literal(1),
  outcome: z.string(),
  reason: z.string().nullable(),
  title: z.string(),
  specification: z.string(),
  sites: z.array(z.looseObject({ site: z.string() })),
  without: z.array(z.object({ site: z.string(), rowsUsed: z.number().nullable() })),
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
 * Writes `result.json`, `coefficients.csv`, `rounds.csv` and the files a fit is handed over with into a folder, made if it is not there; and, with the run's
 * own folder at hand, what is there of those, its journal and specification, so that `commonfit replay` can compute the run again.
 */
export async function writeResultFolder(
  folder: string,
  result: Fetched,
  events: readonly LogEvent[],
  runFolder: string | null = null,
  handOver: readonly (readonly [string, string])[] = [],
): Promise<Attempt<null>> {
  return machineFault('The result cannot be written', folder, async () => {
    await makePath(folder);
    await writeFile(join(folder, 'result.json'), result.text);
    await writeFile(join(folder, 'coefficients.csv'), coefficientsCsv(result.document));
    await writeFile(join(folder, 'rounds.csv'), roundsCsv(events));
    // those of another fit must not stay beside this result
    for (const name of [...Object.values(HAND_OVER_FILES), RUN_FILES.report])
      await rm(join(folder, name), { force: true });
    for (const [name, text] of handOver) await writeFile(join(folder, name), text);
    if (runFolder === null) return null;
    const there = await readdir(runFolder);
    for (const name of [...Object.values(HAND_OVER_FILES), RUN_FILES.report])
      if (there.includes(name)) await copyFile(join(runFolder, name), join(folder, name));
    for (const name of [RUN_FILES.journal, RUN_FILES.specification])
      await copyFile(join(runFolder, name), join(folder, name));
    return null;
  });
}
