import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { type Checked, type Failure, fail, succeed } from '../../protocol/failure.js';
import { canonicalText, digestOf, readCanonical } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { readOnlyStore } from '../journal/file-store.js';
import { openJournal } from '../journal/journal.js';
import type { AnsweredRecord, EndedRecord, OpenedRecord } from '../journal/records.js';
import type { Recomputed } from '../report/replay-text.js';
import { RUN_FILES } from './run-entry.js';

/** All that a run folder holds for its recomputation; `null`: the file is not there. */
export interface RunFolder {
  readonly opened: OpenedRecord | null;
  readonly answered: readonly AnsweredRecord[];
  readonly ended: EndedRecord | null;
  readonly tornBytes: number;
  readonly specificationText: string | null;
  readonly resultText: string | null;
}

export type Read<T> =
  | { readonly ok: true; readonly value: T }
  | { readonly ok: false; readonly failures: readonly Failure[] };
const good = <T>(value: T): Read<T> => ({ ok: true, value });

async function readFiles(folder: string): Promise<Checked<RunFolder>> {
  const specificationText = await textIfThere(join(folder, RUN_FILES.specification));
  if (!specificationText.ok) return specificationText;
  const resultText = await textIfThere(join(folder, RUN_FILES.result));
  if (!resultText.ok) return resultText;
  const records = await readJournal(join(folder, RUN_FILES.journal));
  if (!records.ok) return records;
  return succeed({
    ...records.value,
    specificationText: specificationText.value,
    resultText: resultText.value,
  });
}

async function textIfThere(file: string): Promise<Checked<string | null>> {
  try {
    return succeed(await readFile(file, 'utf8'));
  } catch (error) {
    const { code, message } = error as NodeJS.ErrnoException;
    return code === 'ENOENT'
      ? succeed(null)
      : fail('file-unreadable', `It cannot be read: ${message}.`, { where: { file } });
  }
}

async function readJournal(
  file: string,
): Promise<Checked<Omit<RunFolder, 'specificationText' | 'resultText'>>> {
  const store = await readOnlyStore(file);
  if (!store.ok) return store;
  const journal = openJournal(store.value, { mend: false });
  const answered: AnsweredRecord[] = [];
  let opened: OpenedRecord | null = null;
  let ended: EndedRecord | null = null;
  try {
    for (;;) {
      const next = await journal.next();
      if (!next.ok) return placed(next.failure, file, answered.length);
      const record = next.value;
      if (record === null) return succeed({ opened, answered, ended, tornBytes: journal.tornBytes });
      if (ended !== null) return misplaced('Something is recorded after the end.', file);
      if (record.record === 'ended') ended = record;
      else if (record.record === 'opened') {
        if (opened !== null) return misplaced('It is opened twice.', file);
        opened = record;
      } else {
        if (opened === null) return misplaced('An answer comes before the opening.', file);
        answered.push(record);
      }
    }
  } finally {
    await journal.close();
  }
}

const placed = (failure: Failure, file: string, asksBefore: number): Checked<never> => ({
  ok: false,
  failure: {
    ...failure,
    message: `${failure.message} It can be read as far as the answers to ask ${asksBefore}.`,
    where: { file },
  },
});

const misplaced = (what: string, file: string): Checked<never> =>
  fail('journal-broken', `The journal is not of one run. ${what}`, { where: { file } });

/** What the run is computed with. */
export interface Chosen {
  readonly specification: FitSpecification;
  readonly digest: string;
  readonly source: Recomputed['specification'];
}

/** The specification of the folder, or the journal's own where the folder has none. */
function specificationFor(folder: RunFolder, file: string): Read<Chosen> {
  const recorded = folder.opened;
  if (folder.specificationText !== null) {
    const parsed = parseFitSpecification(folder.specificationText, file);
    if (!parsed.ok) return parsed;
    const digest = digestOf(canonicalText(parsed.value));
    const changed = recorded !== null && recorded.digest !== digest;
    return good({ specification: parsed.value, digest, source: changed ? 'changed' : 'same' });
  }
  if (recorded === null) {
    const { failure } = fail('file-unreadable', 'Neither the folder nor the journal has a specification.', {
      remedy: 'Name the folder of a run: one with a journal and specification.yaml.',
      where: { file },
    });
    return { ok: false, failures: [failure] };
  }
  const canonical = readCanonical(recorded.specification);
  if (!canonical.ok) return { ok: false, failures: [canonical.failure] };
  const digest = digestOf(recorded.specification);
  const source = digest === recorded.digest ? 'of-journal' : 'changed';
  return good({ specification: canonical.value, digest, source });
}

/** A run folder, and what the run is computed with. Nothing in the folder is changed. */
export interface StoredRun {
  readonly folder: RunFolder;
  readonly chosen: Chosen;
}

/** Fails where the folder, its journal or its specification cannot be used. */
export async function readStoredRun(path: string): Promise<Read<StoredRun>> {
  const read = await readFiles(path);
  if (!read.ok) return { ok: false, failures: [read.failure] };
  const chosen = specificationFor(read.value, join(path, RUN_FILES.specification));
  return chosen.ok ? good({ folder: read.value, chosen: chosen.value }) : chosen;
}
