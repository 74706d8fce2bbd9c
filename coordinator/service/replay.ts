import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Journal } from '../journal/journal.js';
import { type AnsweredRecord, decodeReply, type EndedRecord, type OpenedRecord } from '../journal/records.js';
import type { Reply } from '../panel/panel-state.js';
import type { Batch } from '../run/run.js';
import type { Drive, Turn } from './drive.js';

/** What the journal led to: nothing recorded yet, a run in the middle, or a run that had ended. */
export type Replayed =
  | { readonly kind: 'empty' }
  | { readonly kind: 'open'; readonly drive: Drive; readonly turn: Turn }
  | {
      readonly kind: 'ended';
      readonly drive: Drive | null;
      readonly turn: Turn | null;
      readonly ended: EndedRecord;
    };

/**
 * Runs the recorded answers through the generator again. Fails with `journal-broken` where the journal is damaged or
 * the run asks something else than it asked then.
 */
export async function replay(
  journal: Journal,
  run: string,
  openDrive: (opened: OpenedRecord) => Checked<Drive>,
): Promise<Checked<Replayed>> {
  let drive: Drive | null = null;
  let turn: Turn | null = null;
  for (;;) {
    const next = await journal.next();
    if (!next.ok) return next;
    const record = next.value;
    if (record === null) {
      if (drive === null || turn === null) return succeed({ kind: 'empty' });
      return succeed({ kind: 'open', drive, turn });
    }
    if (record.record === 'opened') {
      if (drive !== null) return broken('It is opened twice.');
      const opened = openDrive(record);
      if (!opened.ok) return opened;
      drive = opened.value;
      turn = drive.begin();
    } else if (record.record === 'answered') {
      if (drive === null || turn === null) return broken('An answer comes before the opening.');
      const fed = feedRecorded(drive, turn, run, record);
      if (!fed.ok) return fed;
      turn = fed.value;
    } else {
      const after = await journal.next();
      if (!after.ok) return after;
      if (after.value !== null) return broken('Something is recorded after the end.');
      return succeed({ kind: 'ended', drive, turn, ended: record });
    }
  }
}

function feedRecorded(drive: Drive, turn: Turn, run: string, record: AnsweredRecord): Checked<Turn> {
  const differs = askDiffers(drive, turn, record);
  if (differs !== null) return broken(differs);
  const batch = recordedBatch(drive, run, record);
  if (!batch.ok) return batch;
  return turn.kind === 'ask' ? succeed(drive.feed(turn.asked, batch.value, record.measured)) : succeed(turn);
}

/** How the ask the run stands at differs from the recorded one, as a sentence; null where they agree. */
export function askDiffers(drive: Drive, turn: Turn, record: AnsweredRecord): string | null {
  if (turn.kind !== 'ask' || turn.ask !== record.ask) {
    return `Ask ${record.ask} is recorded where the run does not ask it.`;
  }
  const { replies, agesMs, gone } = record;
  const count = drive.roster.length;
  if (replies.length !== count || agesMs.length !== count || gone.some((member) => member >= count)) {
    return `Ask ${record.ask} is recorded with ${replies.length} replies and ${agesMs.length} times; the roster has ${count} members.`;
  }
  return drive.digestOf(turn.asked) === record.asked
    ? null
    : `Ask ${record.ask} was another one when it was recorded.`;
}

/**
 * What came before the barrier of one ask opened; each reply is to the ask that its member owed then. Fails with
 * `journal-broken`.
 */
export function recordedBatch(drive: Drive, run: string, record: AnsweredRecord): Checked<Batch> {
  const replies: (Reply | null)[] = [];
  for (const [member, ask] of drive.owedAsks().entries()) {
    const bytes = record.replies[member];
    if (bytes === null) {
      replies.push(null);
      continue;
    }
    if (ask === null) return broken(`With ask ${record.ask} a reply is recorded that nobody was asked for.`);
    const reply = decodeReply(run, ask, bytes);
    if (!reply.ok) return reply;
    replies.push(reply.value);
  }
  return succeed({ replies, agesMs: record.agesMs, gone: record.gone });
}

const broken = (what: string) =>
  fail('journal-broken', `The journal does not fit the run. ${what}`, {
    remedy:
      'Take the run up with the version of commonfit and Node that its journal names, or submit the specification again.',
  });
