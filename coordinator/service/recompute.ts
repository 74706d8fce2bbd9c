import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { type Checked, type Failure, fail, succeed } from '../../protocol/failure.js';
import { canonicalText, digestOf, readCanonical } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { readOnlyStore } from '../journal/file-store.js';
import { openJournal } from '../journal/journal.js';
import type { AnsweredRecord, EndedRecord, OpenedRecord } from '../journal/records.js';
import type { Difference, Recomputed } from '../report/replay-text.js';
import { fit as runOf } from '../run/fit.js';
import type { RunEnd, RunOutcome } from '../run/run.js';
import { Drive, type Turn } from './drive.js';
import { firstDifference } from './first-difference.js';
import { askDiffers, recordedBatch } from './replay.js';
import { forcedEnd } from './round-events.js';
import { RUN_FILES, resultJson } from './run-entry.js';

/** All that a run folder holds for its recomputation; `null`: the file is not there. */
interface RunFolder {
  readonly opened: OpenedRecord | null;
  readonly answered: readonly AnsweredRecord[];
  readonly ended: EndedRecord | null;
  readonly tornBytes: number;
  readonly specificationText: string | null;
  readonly resultText: string | null;
}

type Read<T> =
  | { readonly ok: true; readonly value: T }
  | { readonly ok: false; readonly failures: readonly Failure[] };
const good = <T>(value: T): Read<T> => ({ ok: true, value });

/**
 * Recomputes every consensus step of a run from its folder, and changes nothing there. What does not come out again as
 * it is recorded is in the value; fails where the folder, its journal or its specification cannot be used.
 */
export async function recomputeFolder(folder: string): Promise<Read<Recomputed>> {
  const read = await readRunFolder(folder);
  if (!read.ok) return { ok: false, failures: [read.failure] };
  const chosen = specificationFor(read.value, join(folder, RUN_FILES.specification));
  return chosen.ok ? good(recompute(read.value, chosen.value)) : chosen;
}

async function readRunFolder(folder: string): Promise<Checked<RunFolder>> {
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

interface Chosen {
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

function recompute(folder: RunFolder, { specification, digest, source }: Chosen): Recomputed {
  const { opened, answered, ended, tornBytes } = folder;
  const base = {
    run: opened?.run ?? null,
    title: specification.title,
    asksRecorded: answered.length,
    tornBytes,
    specification: source,
    software: opened?.software ?? null,
    node: opened?.node ?? null,
    ended: ended !== null,
  };
  const drive =
    opened === null
      ? null
      : new Drive(
          opened.run,
          opened.roster,
          (roster) => runOf(specification, digest, roster),
          () => {},
        );
  const walked = walk(drive, opened?.run ?? '', answered);
  if (walked.difference !== null) {
    return { ...base, asksAgreed: walked.asksAgreed, difference: walked.difference, result: 'not-reached' };
  }
  const end = endOf(walked.turn, ended, () =>
    forcedEnd(
      { outcome: ended?.outcome as RunOutcome, reason: ended?.reason ?? '' },
      { specification, digest },
      drive,
    ),
  );
  return { ...base, asksAgreed: walked.asksAgreed, ...compareEnd(end, ended, folder.resultText) };
}

interface Walked {
  readonly asksAgreed: number;
  readonly turn: Turn | null;
  readonly difference: Difference | null;
}

/** Feeds the recorded replies ask by ask, up to the first difference. */
function walk(drive: Drive | null, run: string, answered: readonly AnsweredRecord[]): Walked {
  let turn = drive?.begin() ?? null;
  for (const [asksAgreed, record] of answered.entries()) {
    if (drive === null || turn === null) break;
    const stage = turn.kind === 'ask' ? turn.asked.stage : 'end';
    const differs = askDiffers(drive, turn, record);
    const batch = differs === null ? recordedBatch(drive, run, record) : null;
    if (turn.kind !== 'ask' || batch === null || !batch.ok) {
      const what = differs ?? (batch?.ok === false ? batch.failure.message : 'The run has ended.');
      return { asksAgreed, turn, difference: { ask: record.ask, stage, what } };
    }
    turn = drive.feed(turn.asked, batch.value, record.measured);
  }
  return { asksAgreed: answered.length, turn, difference: null };
}

/** The recomputed end; null where the recorded answers leave the run at an ask. */
function endOf(turn: Turn | null, ended: EndedRecord | null, forced: () => RunEnd): RunEnd | null {
  if (ended?.forced === true) return forced();
  return turn?.kind === 'end' ? turn.end : null;
}

function compareEnd(
  end: RunEnd | null,
  ended: EndedRecord | null,
  stored: string | null,
): Pick<Recomputed, 'difference' | 'result'> {
  const atEnd = (what: string): Difference => ({ ask: null, stage: 'end', what });
  if (end === null) {
    if (ended !== null) {
      const what = `The journal says that the run ended as ${ended.outcome}; recomputed, it goes on.`;
      return { difference: atEnd(what), result: 'not-reached' };
    }
    if (stored === null) return { difference: null, result: 'none-yet' };
    const what = 'There is a result.json, but the journal stops before the run ends.';
    return { difference: atEnd(what), result: 'not-reached' };
  }
  if (ended !== null && (ended.outcome !== end.outcome || ended.reason !== end.reason)) {
    const what = `The journal says that the run ended as ${ended.outcome} (${ended.reason ?? 'no reason'}); recomputed, it ends as ${end.outcome} (${end.reason ?? 'no reason'}).`;
    return { difference: atEnd(what), result: 'not-reached' };
  }
  if (stored === null) {
    if (ended === null) return { difference: null, result: 'none-yet' };
    return { difference: atEnd('The run has ended, and result.json is not there.'), result: 'missing' };
  }
  const recomputed = resultJson(end.result);
  if (stored === recomputed) return { difference: null, result: 'equal' };
  return { difference: atEnd(firstDifference(stored, recomputed)), result: 'different' };
}
