/**
 * Messages to frames and back. A frame is one CBOR map (RFC 8949) in preferred serialisation; a float64 vector is a
 * typed array of RFC 8746 (tag 86: little endian). What comes in is checked in this order: size, heads of all items
 * (`scanFrame`), CBOR, kind, version, fields. Every way a frame can be wrong is a failure value.
 */
import { type DecodeOptions, decode, type EncodeOptions, encode, Token, Type } from 'cborg';
import type { z } from 'zod';
import { type Checked, FAILURE_CODES, type FailureCode, fail, succeed } from './failure.js';
import { FLOAT64_LE_TAG, scanFrame } from './frame-scan.js';
import { type ToCoordinator, toCoordinator } from './messages/to-coordinator.js';
import { type ToWorker, toWorker } from './messages/to-worker.js';
import { PROTOCOL_VERSION } from './version.js';

if (new Uint8Array(Float64Array.of(1).buffer)[7] !== 0x3f) {
  throw new Error('commonfit runs on little-endian processors only');
}

const encodeOptions: EncodeOptions = {
  typeEncoders: {
    Float64Array: (values: Float64Array) => [
      new Token(Type.tag, FLOAT64_LE_TAG),
      new Token(Type.bytes, new Uint8Array(values.buffer, values.byteOffset, values.byteLength)),
    ],
    // Minus zero is an integer to the encoder and would lose its sign.
    number: (value: number) => (Object.is(value, -0) ? new Token(Type.float, value) : null),
  },
};

const decodeOptions: DecodeOptions = {
  strict: true,
  allowIndefinite: false,
  allowUndefined: false,
  allowBigInt: false,
  allowInfinity: false,
  allowNaN: false,
  rejectDuplicateMapKeys: true,
  tags: {
    [FLOAT64_LE_TAG]: (content) => {
      const bytes = content();
      if (!(bytes instanceof Uint8Array)) throw new Error('a vector is a byte string');
      // cborg hands out a copy of its own, which starts at an aligned offset; anything else is copied here.
      const aligned = bytes.byteOffset % 8 === 0 ? bytes : bytes.slice();
      return new Float64Array(aligned.buffer, aligned.byteOffset, aligned.length / 8);
    },
  },
};

/**
 * The frame of a message. The numbers are not checked here (the reader does, once); a message that the reader would
 * refuse for another reason is a defect of the caller.
 */
export function encodeMessage(message: ToWorker | ToCoordinator): Uint8Array {
  return encode(message, encodeOptions);
}

const workerKinds: ReadonlySet<string> = new Set(toWorker.options.map((option) => option.shape.kind.value));
const coordinatorKinds: ReadonlySet<string> = new Set(
  toCoordinator.options.map((option) => option.shape.kind.value),
);

/** A frame that a worker received. */
export function decodeToWorker(bytes: Uint8Array): Checked<ToWorker> {
  return decodeMessage(bytes, toWorker, workerKinds);
}

/** A frame that a coordinator received. */
export function decodeToCoordinator(bytes: Uint8Array): Checked<ToCoordinator> {
  return decodeMessage(bytes, toCoordinator, coordinatorKinds);
}

function decodeMessage<T>(bytes: Uint8Array, schema: z.ZodType<T>, kinds: ReadonlySet<string>): Checked<T> {
  const broken = scanFrame(bytes);
  if (broken !== null) return { ok: false, failure: broken };
  const decoded = decodeMap(bytes);
  if (!decoded.ok) return decoded;
  const { kind, version } = decoded.value;
  if (typeof kind !== 'string') return fail('frame-malformed', 'The message has no text field "kind".');
  if (!kinds.has(kind)) {
    const known = [...kinds].join(', ');
    return fail('message-unknown', `A message of kind "${shown(kind, 40)}"; this side takes ${known}.`);
  }
  if (typeof version === 'number' && version !== PROTOCOL_VERSION) {
    return fail(
      'version-unsupported',
      `The peer speaks version ${version} of the protocol; this side speaks version ${PROTOCOL_VERSION}.`,
      { remedy: 'Run the same release of commonfit on both sides.' },
    );
  }
  const parsed = schema.safeParse(decoded.value);
  return parsed.success ? succeed(parsed.data) : describeIssue(kind, parsed.error);
}

function decodeMap(bytes: Uint8Array): Checked<Record<string, unknown>> {
  try {
    return succeed(decode(bytes, decodeOptions));
  } catch (error) {
    const reason = error instanceof Error ? error.message : String(error);
    return fail('frame-malformed', `The frame is not in preferred CBOR: ${shown(reason, REASON_MOST)}.`);
  }
}

function describeIssue(kind: string, error: z.ZodError): Checked<never> {
  const [issue] = error.issues;
  const field = issue.path.reduce<string>(
    (path, step) => (typeof step === 'number' ? `${path}[${step}]` : `${path}.${String(step)}`),
    kind,
  );
  return fail(failureOf(issue), `${shown(issue.message, REASON_MOST)}.`, { where: { field } });
}

/** Characters of a reason: what is in a frame may be long, and ends on a terminal. */
const REASON_MOST = 300;

/** The beginning of what a peer wrote, without characters that would move a terminal's cursor or turn its text round. */
const shown = (text: string, most: number): string =>
  `${text.slice(0, most).replaceAll(/[\p{C}\p{Zl}\p{Zp}]/gu, '\ufffd')}${text.length > most ? ' …' : ''}`;

/** A schema may name the code of its refinement in the issue's `params`; every other issue is a malformed message. */
function failureOf(issue: z.core.$ZodIssue): FailureCode {
  const named: unknown = issue.code === 'custom' ? issue.params?.failure : undefined;
  return FAILURE_CODES.find((code) => code === named) ?? 'frame-malformed';
}
