import type { AnsweredRecord, EndedRecord } from '../journal/records.js';
import type { Difference, Recomputed } from '../report/replay-text.js';
import type { Heard } from '../run/answer-book.js';
import { fit as runOf } from '../run/fit.js';
import type { Batch, RunEnd, RunOutcome } from '../run/run.js';
import { Drive, type Turn } from './drive.js';
import { firstDifference } from './first-difference.js';
import { askDiffers, recordedBatch } from './replay.js';
import { forcedEnd } from './round-events.js';
import { resultJson } from './run-entry.js';
import { type Read, readStoredRun, type StoredRun } from './run-folder.js';

/**
 * Recomputes every consensus step of a run from its folder, and changes nothing there. What does not come out again as
 * it is recorded is in the value; fails where the folder, its journal or its specification cannot be used.
 */
export async function recomputeFolder(folder: string): Promise<Read<Recomputed>> {
  const stored = await readStoredRun(folder);
  return stored.ok ? { ok: true, value: recompute(stored.value) } : stored;
}

/**
 * Recomputes every consensus step of a stored run; `heard` is told of every ask that comes out as recorded, with the
 * replies to it.
 */
export function recompute(
  { folder, chosen: { specification, digest, source } }: StoredRun,
  heard: (heard: Heard) => void = () => {},
): Recomputed {
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
          (roster) => runOf(specification, digest, roster, opened.startFrom),
          () => {},
        );
  const walked = walk(drive, opened?.run ?? '', answered, heard);
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
function walk(
  drive: Drive | null,
  run: string,
  answered: readonly AnsweredRecord[],
  heard: (heard: Heard) => void,
): Walked {
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
    heard(heardOf(drive, turn, batch.value));
    turn = drive.feed(turn.asked, batch.value, record.measured);
  }
  return { asksAgreed: answered.length, turn, difference: null };
}

/** Each reply with the work that its member owed: of this ask, or of an older one. */
const heardOf = (
  drive: Drive,
  { ask, asked }: Extract<Turn, { kind: 'ask' }>,
  { replies }: Batch,
): Heard => ({
  ask,
  stage: asked.stage,
  answers: drive.owed.map((owed, member) => {
    const reply = replies[member];
    return owed === null || reply === null ? null : { works: owed.works, reply };
  }),
});

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
