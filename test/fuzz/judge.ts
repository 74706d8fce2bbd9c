import { isDeepStrictEqual } from 'node:util';
import { decodeToCoordinator, decodeToWorker, encodeMessage } from '../../protocol/codec.js';
import type { Checked, FailureCode } from '../../protocol/failure.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';

/** What a frame that is no message may be refused with. */
const WIRE_CODES: ReadonlySet<FailureCode> = new Set([
  'frame-malformed',
  'frame-too-large',
  'message-unknown',
  'version-unsupported',
  'number-not-finite',
]);
/** A failure is shown on terminals, kept in logs and cut for close frames: it stays small whatever the frame holds. */
const TEXT_MOST = 1000;
/** Longest time a frame of at most 64 KiB may take on a machine that is busy with other tests. Milliseconds. */
const DECODE_MS_MOST = 2000;

export interface Verdict {
  /** How the worker's reader and the coordinator's end: `ok` or the failure's code. */
  readonly ends: readonly [string, string];
}

/**
 * Gives the frame to both readers. Throws where a promise of the codec is broken: no exception, a code of the wire, a
 * short text that can be shown, and a message that was accepted is read again as the same message from its own frame.
 */
export function judge(frame: Uint8Array): Verdict {
  const copy = frame.slice();
  const startedMs = performance.now();
  const ends = [endOf(frame, decodeToWorker), endOf(frame, decodeToCoordinator)] as const;
  const tookMs = performance.now() - startedMs;
  if (frame.length <= 65_536 && tookMs > DECODE_MS_MOST) broken(frame, `decoding took ${tookMs} ms`);
  if (Buffer.compare(copy, frame) !== 0) broken(frame, 'the frame was changed');
  return { ends };
}

function endOf(frame: Uint8Array, decode: (bytes: Uint8Array) => Checked<ToWorker | ToCoordinator>): string {
  const read = decode(frame);
  if (!read.ok) {
    const { code, message, where } = read.failure;
    if (!WIRE_CODES.has(code)) broken(frame, `refused with ${code}`);
    const text = `${message}${where?.field ?? ''}`;
    if (text.length > TEXT_MOST) broken(frame, `refused with a text of ${text.length} characters`);
    if (/[\p{C}\p{Zl}\p{Zp}]/u.test(text)) broken(frame, `control characters in ${JSON.stringify(text)}`);
    return code;
  }
  const again = decode(encodeMessage(read.value));
  if (!again.ok) broken(frame, `accepted, but its own frame is refused: ${again.failure.message}`);
  if (!isDeepStrictEqual(again.value, read.value)) broken(frame, 'accepted, and read differently again');
  return 'ok';
}

function broken(frame: Uint8Array, what: string): never {
  throw new Error(`${what}. The frame: ${Buffer.from(frame.subarray(0, 4096)).toString('hex')}`);
}
