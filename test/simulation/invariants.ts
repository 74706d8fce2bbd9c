import { createHash } from 'node:crypto';
import { openJournal } from '../../coordinator/journal/journal.js';
import { memoryStore } from '../../coordinator/journal/memory-store.js';
import type { AnsweredRecord, JournalRecord } from '../../coordinator/journal/records.js';
import { fit as fitRun } from '../../coordinator/run/fit.js';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { memberName } from '../../coordinator/run/run.js';
import { Drive } from '../../coordinator/service/drive.js';
import { replay } from '../../coordinator/service/replay.js';
import { decodeToCoordinator, encodeMessage } from '../../protocol/codec.js';
import { succeed } from '../../protocol/failure.js';
import type { Answer, Refusal } from '../../protocol/messages/round.js';
import { readLedger } from '../../worker/custody/ledger.js';
import type { Cluster } from './cluster.js';
import type { StoredRun } from './sim-coordinator.js';

/** What a line just added to a run's round log breaks, or null. */
export function logFault(stored: StoredRun, event: LogEvent): string | null {
  const outcomes = stored.log.filter((line) => line.event === 'outcome').length;
  if (event.event === 'outcome')
    return outcomes > 1
      ? 'two outcomes were told'
      : stored.result === null
        ? 'an outcome was told before its result was kept'
        : null;
  if (outcomes > 0) return `"${event.event}" was logged after the outcome`;
  const rounds = stored.log.flatMap((line) => (line.event === 'round' ? [line.round] : []));
  if (event.event === 'round' && rounds.some((round, index) => round !== index + 1))
    return `the round log goes ${rounds.join(' ')}`;
  return null;
}

/** How a run ended, as far as a fault that heals must not change it. */
export interface Ending {
  readonly result: ResultDocument;
  readonly text: string;
  /** SHA-256 over every reply in the journal, run and times left out. */
  readonly answers: string;
  readonly asks: number;
}

/** Checks what every ended run must hold; its ending where it does. */
export async function checkRun(cluster: Cluster, stored: StoredRun): Promise<Ending | null> {
  const broken = (what: string): null => {
    cluster.violated(`${stored.run}: ${what}`);
    return null;
  };
  if (stored.result === null) return broken('it has ended without a result');
  const text = stored.result;
  const result: ResultDocument = JSON.parse(text);
  const records = await recordsOf(stored);
  if (typeof records === 'string') return broken(records);
  const shape = shapeFault(records, result);
  if (shape !== null) return broken(shape);
  const again = await replayed(stored);
  if (again !== null && again !== text) return broken('its journal, replayed, gives another result');
  const certificate = certificateFault(result);
  if (certificate !== null) return broken(certificate);
  const answered = records.filter((record) => record.record === 'answered');
  const ledger = ledgerFault(cluster, records[0], answered);
  if (ledger !== null) return broken(ledger);
  return { result, text, answers: digestOfAnswers(answered), asks: answered.length };
}

async function recordsOf(stored: StoredRun): Promise<JournalRecord[] | string> {
  const journal = openJournal(memoryStore(stored.journal.bytes()));
  const records: JournalRecord[] = [];
  for (;;) {
    const next = await journal.next();
    if (!next.ok) return `its journal cannot be read: ${next.failure.message}`;
    if (next.value === null) break;
    records.push(next.value);
  }
  return journal.tornBytes > 0 ? `its journal ends in ${journal.tornBytes} torn bytes` : records;
}

/** Opened once, every ask answered once and by the whole roster, ended once; the result tells that end. */
function shapeFault(records: readonly JournalRecord[], result: ResultDocument): string | null {
  const end = records.at(-1);
  if (end?.record !== 'ended') return 'its journal does not hold its end';
  if (end.outcome !== result.outcome) return `its journal says ${end.outcome}, its result ${result.outcome}`;
  const [opened] = records;
  if (opened.record !== 'opened')
    return records.length === 1 ? null : 'its journal does not begin with its opening';
  for (const [index, record] of records.slice(1, -1).entries()) {
    if (record.record !== 'answered' || record.ask !== index + 1)
      return `ask ${index + 1} is not recorded once`;
    if (record.replies.length !== opened.roster.length) return `ask ${record.ask} lacks a reply`;
  }
  return null;
}

/** The result that the journal alone gives; null where the run was ended from outside. */
async function replayed({ run, model, journal }: StoredRun): Promise<string | null> {
  const { specification, digest } = model;
  const again = await replay(openJournal(memoryStore(journal.bytes())), run, ({ roster }) =>
    succeed(
      new Drive(
        run,
        roster,
        (members) => fitRun(specification, digest, members),
        () => {},
      ),
    ),
  );
  if (!again.ok) return again.failure.message;
  if (again.value.kind !== 'ended') return 'not ended';
  const { ended, turn } = again.value;
  if (ended.forced) return null;
  return turn?.kind === 'end' ? JSON.stringify(turn.end.result, null, 2) : 'not at its end';
}

function certificateFault({ outcome, tolerance, fits }: ResultDocument): string | null {
  if (outcome === 'solved' && fits.length === 0) return 'it is solved without a fit';
  for (const one of fits) {
    const gap = one.certificate?.relativeGap ?? Number.NaN;
    if (one.outcome === 'solved' && !(gap <= tolerance)) return `it is solved with a relative gap of ${gap}`;
    if (outcome === 'solved' && one.outcome !== 'solved') return `it is solved, a fit of it ${one.outcome}`;
  }
  return null;
}

/** Every recorded answer left its site after a line in the site's ledger, and every ask has one line at most. */
function ledgerFault(
  cluster: Cluster,
  opened: JournalRecord,
  answered: readonly AnsweredRecord[],
): string | null {
  if (opened.record !== 'opened') return null;
  for (const [index, member] of opened.roster.entries()) {
    const name = memberName(member);
    const worker = cluster.workers.find((one) => one.name === name);
    if (worker === undefined) return `its roster names ${name}`;
    const ledger = readLedger(worker.ledger.text(), name);
    if (!ledger.ok) return `the ledger of ${name} is broken: ${ledger.failure.message}`;
    const asks = ledger.value.records.filter(({ run }) => run === opened.run).map(({ ask }) => ask);
    if (new Set(asks).size !== asks.length) return `the ledger of ${name} counts an ask twice`;
    const lines = new Set(asks);
    const counted = new Set<number>();
    for (const { replies } of answered) {
      const reply = replyOf(replies[index]);
      if (reply === null) continue;
      if (counted.has(reply.ask)) return `a reply of ${name} to ask ${reply.ask} counts twice`;
      counted.add(reply.ask);
      if (reply.kind === 'answer' && !lines.has(reply.ask))
        return `${name} answered ask ${reply.ask} without a line in its ledger`;
    }
  }
  return null;
}

/** A recorded reply; null where none had come. */
function replyOf(bytes: Uint8Array | null): Answer | Refusal | null {
  const reply = bytes === null ? null : decodeToCoordinator(bytes);
  return reply?.ok && reply.value.kind !== 'hello' ? reply.value : null;
}

function digestOfAnswers(answered: readonly AnsweredRecord[]): string {
  const hash = createHash('sha256');
  for (const { replies } of answered) {
    for (const bytes of replies) {
      const reply = replyOf(bytes);
      if (reply !== null) hash.update(encodeMessage({ ...reply, run: 'any' }));
    }
  }
  return hash.digest('hex');
}
