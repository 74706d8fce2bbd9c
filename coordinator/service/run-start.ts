import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { startFromSchema } from '../journal/records.js';
import type { ResultDocument } from '../run/result.js';
import { type StartFrom, startFromOf } from '../run/start-from.js';
import { unwritableIfFails, writeWhole } from './files.js';
import { RUN_FILES, type RunEntry, summaryOf } from './run-entry.js';

/**
 * What a run with this specification starts from where it is to start from `earlier`. Fails with `not-found` where that
 * has no result, `field-value` where its coefficients are of no use.
 */
export async function startFromEntry(
  earlier: RunEntry | null,
  run: string,
  specification: FitSpecification,
): Promise<Checked<StartFrom>> {
  if (earlier === null) return fail('not-found', `There is no run ${run} to start from.`);
  const { state } = summaryOf(earlier);
  if (state !== 'ended')
    return fail('not-found', `Run ${run} is ${state}: it has no coefficients to start from yet.`);
  const file = join(earlier.folder, RUN_FILES.specification);
  const texts = await unwritableIfFails(earlier.folder, async () => ({
    specification: await readFile(file, 'utf8'),
    result: await readFile(join(earlier.folder, RUN_FILES.result), 'utf8'),
  }));
  if (!texts.ok) return texts;
  const parsed = parseFitSpecification(texts.value.specification, file);
  if (!parsed.ok) return { ok: false, failure: parsed.failures[0] };
  // written by this program as a whole; nobody else writes in the state folder
  const result = JSON.parse(texts.value.result) as ResultDocument;
  return startFromOf({ run, specification: parsed.value, result }, specification);
}

/** Keeps on stable storage what an accepted run starts from, until its journal holds it. */
export const keepStart = async (folder: string, startFrom: StartFrom | null): Promise<Checked<null>> =>
  startFrom === null
    ? succeed(null)
    : writeWhole(join(folder, RUN_FILES.start), `${JSON.stringify(startFrom, null, 2)}\n`);

/** What an accepted run starts from; null where there is nothing. Fails with `state-unwritable`. */
export const readStart = (folder: string): Promise<Checked<StartFrom | null>> => {
  const file = join(folder, RUN_FILES.start);
  return unwritableIfFails(file, async () => {
    try {
      return startFromSchema.parse(JSON.parse(await readFile(file, 'utf8')));
    } catch (error) {
      if ((error as NodeJS.ErrnoException).code === 'ENOENT') return null;
      throw error;
    }
  });
};
