import { writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { frameRecord } from '../../coordinator/journal/frame.js';
import { encodeRecord, encodeReply, type JournalRecord } from '../../coordinator/journal/records.js';
import { fit as runOf } from '../../coordinator/run/fit.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import type { MemberReply } from '../../coordinator/run/run.js';
import type { StartFrom } from '../../coordinator/run/start-from.js';
import { Drive } from '../../coordinator/service/drive.js';
import { RUN_FILES, resultJson } from '../../coordinator/service/run-entry.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { SOFTWARE } from '../../protocol/version.js';
import type { SitesInProcess } from './in-process-fit.js';

const RUN = 'r1';

/**
 * A whole run in this process, kept in a folder as a coordinator keeps it: journal, specification, result. `late`: a
 * member that answers only when it is waited for.
 */
export async function storedRun(
  text: string,
  { spec, roster, answer }: SitesInProcess,
  folder: string,
  { startFrom = null, late = null }: { startFrom?: StartFrom | null; late?: number | null } = {},
): Promise<{ readonly records: JournalRecord[]; readonly result: ResultDocument }> {
  const canonical = canonicalText(spec);
  const digest = digestOf(canonical);
  const records: JournalRecord[] = [
    {
      record: 'opened',
      format: 1,
      run: RUN,
      specification: canonical,
      digest,
      roster: roster.map((member) => ({ ...member })),
      startFrom,
      software: SOFTWARE,
      node: process.version,
    },
  ];
  const drive = new Drive(
    RUN,
    roster,
    (members) => runOf(spec, digest, members, startFrom),
    () => {},
  );
  const pending: (MemberReply | null)[] = roster.map(() => null);
  let turn = drive.begin();
  while (turn.kind === 'ask') {
    const { ask, asked } = turn;
    const batch = answer(asked);
    for (const [member, own] of asked.works.entries())
      if (own !== null) pending[member] = batch.replies[member];
    const { waitFor } = asked.barrier;
    const alone = pending.every((reply, member) => reply === null || member === late);
    const replies = pending.map((reply, member) =>
      member !== late || alone || waitFor.includes(member) ? reply : null,
    );
    for (const [member, reply] of replies.entries()) if (reply !== null) pending[member] = null;
    const agesMs = roster.map((_, member) => (member === late ? 1000 : 1));
    const owed = drive.owedAsks();
    const measured = { tookMs: 1, slowest: null, numbersUp: 0, numbersDown: 0, at: 'then' };
    records.push({
      record: 'answered',
      ask,
      asked: drive.digestOf(asked),
      replies: replies.map((reply, i) => (reply === null ? null : encodeReply(RUN, owed[i] ?? ask, reply))),
      agesMs,
      gone: [],
      measured,
    });
    turn = drive.feed(asked, { replies, agesMs, gone: [] }, measured);
  }
  if (turn.kind === 'defect') throw turn.error;
  const { outcome, reason, result } = turn.end;
  records.push({ record: 'ended', outcome, reason, forced: false });
  await writeFile(join(folder, RUN_FILES.specification), text);
  await writeFile(join(folder, RUN_FILES.result), resultJson(result));
  await writeJournal(folder, records);
  return { records, result };
}

/** Every record with the checks that fit it. */
export const writeJournal = (folder: string, records: readonly JournalRecord[]): Promise<void> =>
  writeFile(
    join(folder, RUN_FILES.journal),
    Buffer.concat(records.map((record) => frameRecord(encodeRecord(record)))),
  );
