/** Frames that are no message, byte by byte, and frames at the limits. */
import { describe, expect, test } from 'vitest';
import { decodeToCoordinator, decodeToWorker, encodeMessage } from '../../protocol/codec.js';
import { LIMITS } from '../../protocol/limits.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { ask, hello, prepare } from '../support/messages.js';

function codeOf(bytes: Uint8Array): string {
  const results = [decodeToWorker(bytes), decodeToCoordinator(bytes)];
  const codes = new Set(results.map((result) => (result.ok ? 'ok' : result.failure.code)));
  return [...codes].join(' ');
}
const frame = (hex: string): Uint8Array => Uint8Array.from(Buffer.from(hex.replaceAll(' ', ''), 'hex'));

describe('bytes that are no message', () => {
  test.each([
    ['nothing', ''],
    ['an integer', '01'],
    ['an array', '80'],
    ['a vector', 'd856 48 0000000000000000'],
    ['an empty map', 'a0'],
    ['a break', 'ff'],
    ['text that looks like JSON', Buffer.from('{"kind":"hello"}').toString('hex')],
    ['bytes after the end', 'a1 646b696e64 6568656c6c6f 00'],
    ['a map that ends early', 'a2 646b696e64 6568656c6c6f'],
    ['an indefinite map', 'bf 646b696e64 6568656c6c6f ff'],
    ['an indefinite text', 'a1 646b696e64 7f 6568656c6c6f ff'],
    ['an indefinite array', 'a1 646b696e64 9f ff'],
    ['an indefinite byte string in a vector', 'a1 646b696e64 d856 5f 48 0000000000000000 ff'],
    ['a byte string without tag 86', 'a1 646b696e64 48 0000000000000000'],
    ['a vector of 7 bytes', 'a1 646b696e64 d856 47 00000000000000'],
    ['a vector of text', 'a1 646b696e64 d856 68 6161616161616161'],
    ['a tag inside tag 86', 'a1 646b696e64 d856 d856 48 0000000000000000'],
    ['tag 82 (big endian)', 'a1 646b696e64 d852 48 0000000000000000'],
    ['tag 1 (a time)', 'a1 646b696e64 c1 00'],
    ['a vector longer than the frame', 'a1 646b696e64 d856 5b 0000000100000000'],
    ['a text longer than the frame', 'a1 646b696e64 7a 00010000'],
    ['a text that is not UTF-8', 'a1 646b696e64 62 c328'],
    ['a reserved head', 'a1 646b696e64 1c'],
    ['undefined', 'a1 646b696e64 f7'],
    ['a simple value', 'a1 646b696e64 e0'],
    ['a key that is no text', 'a1 01 6568656c6c6f'],
    ['a repeated key', 'a2 646b696e64 6568656c6c6f 646b696e64 6568656c6c6f'],
    ['an integer in more bytes than needed', 'a1 646b696e64 1801'],
    ['a length in more bytes than needed', 'a1 646b696e64 7805 68656c6c6f'],
    ['an integer beyond 2^53', 'a1 646b696e64 1b 0020000000000000'],
    ['an array length beyond 2^53', 'a1 646b696e64 9b ffffffffffffffff'],
  ])('%s', (_, hex) => {
    expect(codeOf(frame(hex))).toBe('frame-malformed');
  });

  test.each([
    ['16 bits', 'f97e00'],
    ['32 bits', 'fa7f800000'],
    ['64 bits', 'fbfff0000000000000'],
  ])('a number that is not finite, in %s', (_, hex) => {
    expect(codeOf(frame(`a1 646b696e64 ${hex}`))).toBe('number-not-finite');
  });
});

describe('limits', () => {
  /** `depth` arrays, each holding the next one. */
  const nested = (depth: number): Uint8Array => frame(`a1 646b696e64 ${'81'.repeat(depth - 1)} 80`);

  test('nesting is counted before anything is decoded', () => {
    expect(decodeToWorker(nested(LIMITS.nestingMost + 1))).toMatchObject({
      failure: {
        code: 'frame-malformed',
        message: expect.stringContaining(`deeper than ${LIMITS.nestingMost}`),
      },
    });
    expect(decodeToWorker(nested(LIMITS.nestingMost))).toMatchObject({
      failure: { message: expect.stringContaining('"kind"') },
    });
    expect(codeOf(nested(1_000_000))).toBe('frame-malformed');
  });

  test('an array may hold elementsMost elements and no more', () => {
    const kept = Array.from({ length: LIMITS.elementsMost }, (_, i) => i);
    const scaling = { rowCountTotal: 1, kept, center: new Float64Array(), scale: new Float64Array() };
    expect(decodeToWorker(encodeMessage({ ...prepare, scaling })).ok).toBe(true);
    const more = encodeMessage({ ...prepare, scaling: { ...scaling, kept: [...kept, 0] } });
    expect(decodeToWorker(more)).toMatchObject({
      failure: {
        code: 'frame-malformed',
        message: expect.stringContaining(`${LIMITS.elementsMost} elements`),
      },
    });
  });

  test('a map may have fieldsMost fields and no more', () => {
    const fields = Array.from({ length: LIMITS.fieldsMost - 1 }, (_, i) => [`field${i}`, 0] as const);
    const read = (more: object) =>
      decodeToWorker(encodeMessage({ ...Object.fromEntries(fields), ...more } as never));
    expect(read({ kind: 0 })).toMatchObject({ failure: { message: expect.stringContaining('"kind"') } });
    expect(read({ kind: 0, more: 0 })).toMatchObject({
      failure: {
        code: 'frame-malformed',
        message: expect.stringContaining(`more than ${LIMITS.fieldsMost} fields`),
      },
    });
  });

  test('a frame may hold itemsMost items and no more, however they are spread', () => {
    const arrays = LIMITS.itemsMost / LIMITS.elementsMost + 1;
    const message = { kind: Array.from({ length: arrays }, () => new Array(LIMITS.elementsMost).fill(0)) };
    expect(decodeToWorker(encodeMessage(message as unknown as ToWorker))).toMatchObject({
      failure: { code: 'frame-malformed', message: expect.stringContaining(`${LIMITS.itemsMost} items`) },
    });
  });

  test('a text may have textMost bytes and no more', () => {
    const specification = 'x'.repeat(LIMITS.textMost);
    expect(decodeToWorker(encodeMessage({ ...prepare, specification })).ok).toBe(true);
    expect(decodeToWorker(encodeMessage({ ...prepare, specification: `${specification}x` })).ok).toBe(false);
  });

  test('a work item may hold batchMost problems and no more', () => {
    const point = { point: new Float64Array(1), want: 'value' as const };
    const asking = (points: number): ToWorker => ({
      ...ask,
      work: [
        {
          work: 'evaluate',
          problem: 0,
          part: null,
          points: new Array(points).fill(point),
          ownFit: null,
          sketch: null,
        },
      ],
    });
    expect(decodeToWorker(encodeMessage(asking(LIMITS.batchMost))).ok).toBe(true);
    expect(decodeToWorker(encodeMessage(asking(LIMITS.batchMost + 1))).ok).toBe(false);
  });

  test('a frame may have frameBytesMost bytes and no more', () => {
    const oversize = new Uint8Array(LIMITS.frameBytesMost + 1);
    oversize.set(encodeMessage(hello));
    expect(codeOf(oversize)).toBe('frame-too-large');
    expect(codeOf(oversize.subarray(0, LIMITS.frameBytesMost))).toBe('frame-malformed');
  });
});
