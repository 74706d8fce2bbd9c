import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { encodeMessage } from '../../protocol/codec.js';
import type { Answer, Refusal } from '../../protocol/messages/round.js';
import type { Hello } from '../../protocol/messages/session.js';
import { PROTOCOL_VERSION } from '../../protocol/version.js';

/** A greeting of its own for each `index` below 1000: of two links of the same member the older is closed. */
export const helloOf = (site: string, index = 0): Hello => ({
  kind: 'hello',
  version: PROTOCOL_VERSION,
  site,
  shard: { index: index + 1, of: 1000 },
  software: 'load',
  kernel: 'load',
});

const answer: Answer = {
  kind: 'answer',
  run: 'r',
  ask: 1,
  work: [
    { work: 'proximal', problems: [{ problem: 0, point: Float64Array.of(0.5, -2, 7), newtonSteps: 3 }] },
  ],
};

export const unasked: Refusal = {
  kind: 'refusal',
  run: 'none',
  ask: 1,
  code: 'internal',
  message: 'nobody asked',
  remedy: null,
};

export interface Malformed {
  readonly name: string;
  readonly payload: Uint8Array;
  readonly closes: number;
}

const { frameMalformed, messageUnexpected, versionUnsupported } = CLOSE_CODES;

/** A valid frame with the bytes of `found` replaced. */
function replaced(bytes: Uint8Array, found: Uint8Array, by: Uint8Array): Uint8Array {
  const at = Buffer.from(bytes).indexOf(found);
  if (at < 0) throw new Error('the frame does not hold the bytes to be replaced');
  return Buffer.concat([bytes.subarray(0, at), by, bytes.subarray(at + found.length)]);
}

const text = (value: string): Uint8Array => Buffer.from(value, 'utf8');
const doubles = (...values: number[]): Uint8Array => new Uint8Array(Float64Array.from(values).buffer);

/** One of each way in which a frame can be wrong, and the close code that says so. */
export function malformedFrames(): readonly Malformed[] {
  const valid = encodeMessage(answer);
  const hello = encodeMessage(helloOf('saltmarsh'));
  const wrong: [string, Uint8Array, number][] = [
    ['no bytes', new Uint8Array(), frameMalformed],
    ['no map', Buffer.of(0x83, 1, 2, 3), frameMalformed],
    ['indefinite length', Buffer.of(0xbf, 0x61, 0x61, 1, 0xff), frameMalformed],
    ['a map of 4 thousand million fields', Buffer.of(0xba, 0xff, 0xff, 0xff, 0xff), frameMalformed],
    ['a text of 2^63 bytes', Buffer.of(0xa1, 0x7b, 0x7f, 255, 255, 255, 255, 255, 255, 255), frameMalformed],
    [
      'a vector longer than its frame',
      Buffer.of(0xa1, 0x61, 0x76, 0xd8, 86, 0x5a, 0x0b, 0xeb, 0xc2, 0),
      frameMalformed,
    ],
    ['an unknown tag', Buffer.of(0xa1, 0x61, 0x76, 0xd8, 85, 0x40), frameMalformed],
    ['no UTF-8', Buffer.of(0xa1, 0x62, 0xff, 0xfe, 1), frameMalformed],
    [
      'nested too deeply',
      Buffer.concat([Buffer.of(0xa1, 0x61, 0x61), Buffer.alloc(60, 0x81)]),
      frameMalformed,
    ],
    ['bytes after the message', Buffer.concat([valid, Buffer.of(0)]), frameMalformed],
    ['cut off', valid.subarray(0, valid.length - 5), frameMalformed],
    ['a vector with NaN', replaced(valid, doubles(-2), doubles(Number.NaN)), frameMalformed],
    [
      'a vector with infinity',
      replaced(valid, doubles(7), doubles(Number.POSITIVE_INFINITY)),
      frameMalformed,
    ],
    ['an unknown kind', replaced(valid, text('answer'), text('anwser')), messageUnexpected],
    ['a kind of the other side', replaced(valid, text('fanswer'), text('gwelcome')), messageUnexpected],
    ['an unknown field', replaced(valid, text('newtonSteps'), text('newtonstepS')), frameMalformed],
    [
      'another version',
      replaced(
        hello,
        Buffer.concat([text('version'), Buffer.of(1)]),
        Buffer.concat([text('version'), Buffer.of(9)]),
      ),
      versionUnsupported,
    ],
    ['a site of another type', replaced(hello, text('isaltmarsh'), Buffer.of(7)), frameMalformed],
  ];
  return wrong.map(([name, payload, closes]) => ({ name, payload, closes }));
}
