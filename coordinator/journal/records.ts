import { createHash } from 'node:crypto';
import { decode, encode, encodeInto } from 'cborg';
import { z } from 'zod';
import { decodeToCoordinator, encodeMessage } from '../../protocol/codec.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Work } from '../../protocol/messages/round.js';
import { isRefusal, type Reply } from '../panel/panel-state.js';
import { frameRecord, HEADER_BYTES, withHeader } from './frame.js';

const count = z.int().min(0);

/** A list and no map: CBOR has its own order of a map's keys, and a result follows the order of the design. */
export const startFromSchema = z.strictObject({
  run: z.string(),
  coefficients: z.array(z.tuple([z.string(), z.number()]).readonly()).readonly(),
  redefined: z.array(z.string()).readonly(),
});

const opened = z.strictObject({
  record: z.literal('opened'),
  format: z.literal(1),
  run: z.string(),
  /** The canonical specification and its SHA-256, hex. */
  specification: z.string(),
  digest: z.string(),
  roster: z.array(
    z.strictObject({
      site: z.string(),
      shard: z.strictObject({ index: z.int().min(1), of: z.int().min(1) }),
      kernel: z.string(),
    }),
  ),
  /** The coefficients of an earlier run that this one starts from; null: none. */
  startFrom: startFromSchema.nullable().default(null),
  software: z.string(),
  node: z.string(),
});

const answered = z.strictObject({
  record: z.literal('answered'),
  /** Asks of a run are numbered from 1 in the order in which the run yields them. */
  ask: z.int().min(1),
  /** SHA-256 (hex) of what was asked of the whole roster, in full. */
  asked: z.string().length(64),
  /**
   * Per member, in roster order: its answer or refusal as the message it came in, to this ask or to the older one that
   * it owed; null: none came before the barrier opened.
   */
  replies: z.array(z.custom<Uint8Array>((value) => value instanceof Uint8Array).nullable()),
  /** Per member: how long its reply took or has been waited for. Milliseconds. */
  agesMs: z.array(count),
  /** Members given up on for good when the barrier opened. */
  gone: z.array(count),
  /** For the round log only; the run never sees it. */
  measured: z.strictObject({
    tookMs: z.number().min(0),
    slowest: z.strictObject({ member: count, ms: z.number().min(0) }).nullable(),
    numbersUp: count,
    numbersDown: count,
    at: z.string(),
  }),
});

const ended = z.strictObject({
  record: z.literal('ended'),
  outcome: z.string(),
  reason: z.string().nullable(),
  /** The run was ended from outside (cancelled, a site missing), not by its own return. */
  forced: z.boolean(),
});

const journalRecord = z.discriminatedUnion('record', [opened, answered, ended]);

export type JournalRecord = z.infer<typeof journalRecord>;
export type OpenedRecord = z.infer<typeof opened>;
export type AnsweredRecord = z.infer<typeof answered>;
export type EndedRecord = z.infer<typeof ended>;
export type Measured = AnsweredRecord['measured'];

export const encodeRecord = (record: JournalRecord): Uint8Array => encode(record);

/** Bytes of a record of replies beside the replies themselves: in all, and for each member. */
const RECORD_REST_BYTES = 1000;
const MEMBER_REST_BYTES = 50;

/** As it stands in the journal. The replies of a round may be long, and are copied once. */
export function frameOf(record: JournalRecord): Uint8Array {
  if (record.record !== 'answered') return frameRecord(encodeRecord(record));
  const { replies } = record;
  const repliesBytes = replies.reduce((sum, reply) => sum + (reply?.length ?? 0), 0);
  const room = repliesBytes + replies.length * MEMBER_REST_BYTES + RECORD_REST_BYTES;
  const frame = new Uint8Array(HEADER_BYTES + room);
  const { written } = encodeInto(record, frame.subarray(HEADER_BYTES));
  return withHeader(frame.subarray(0, HEADER_BYTES + written));
}

/** Fails with `journal-broken`. */
export function decodeRecord(payload: Uint8Array): Checked<JournalRecord> {
  let value: unknown;
  try {
    value = decode(payload, { strict: true, rejectDuplicateMapKeys: true });
  } catch (error) {
    return fail('journal-broken', `A journal record is not CBOR: ${String(error)}.`);
  }
  const parsed = journalRecord.safeParse(value);
  return parsed.success
    ? succeed(parsed.data)
    : fail('journal-broken', `A journal record is not of a known form: ${z.prettifyError(parsed.error)}.`);
}

const NOT_ASKED = encode(null);

/** SHA-256 (hex) over the ask as each member would get it in full, in roster order. */
export function digestOfAsk(run: string, ask: number, works: readonly (readonly Work[] | null)[]): string {
  const hash = createHash('sha256');
  for (const work of works)
    hash.update(work === null ? NOT_ASKED : encodeMessage({ kind: 'ask', run, ask, work: [...work] }));
  return hash.digest('hex');
}

/** A reply as the message it came in: the codec keeps every bit of a vector. */
export const encodeReply = (run: string, ask: number, reply: Reply): Uint8Array =>
  encodeMessage(isRefusal(reply) ? reply : { kind: 'answer', run, ask, work: [...reply] });

/** Fails with `journal-broken` when the bytes are no answer or refusal to this ask. */
export function decodeReply(run: string, ask: number, bytes: Uint8Array): Checked<Reply> {
  const message = decodeToCoordinator(bytes);
  if (!message.ok) return fail('journal-broken', `A recorded reply is damaged: ${message.failure.message}`);
  const reply = message.value;
  if (reply.kind === 'hello' || reply.run !== run || reply.ask !== ask) {
    return fail('journal-broken', `A recorded reply to ask ${ask} belongs to something else.`);
  }
  return succeed(reply.kind === 'answer' ? reply.work : reply);
}
