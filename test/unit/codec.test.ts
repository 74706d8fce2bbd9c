import { readFileSync } from 'node:fs';
import { describe, expect, test } from 'vitest';
import { decodeToCoordinator, decodeToWorker, encodeMessage } from '../../protocol/codec.js';
import type { Checked } from '../../protocol/failure.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { answer, ask, hello, prepare, refusal, runEnd, welcome } from '../support/messages.js';

/** Frames written by another CBOR encoder: see test/reference/frames/make.py. */
function referenceFrame(name: string): Uint8Array {
  const text = readFileSync(new URL(`../reference/frames/${name}.hex`, import.meta.url), 'utf8');
  return Uint8Array.from(Buffer.from(text.replaceAll('\n', ''), 'hex'));
}

const hex = (bytes: Uint8Array): string => Buffer.from(bytes).toString('hex');

function codeOf(result: Checked<ToWorker | ToCoordinator>): string {
  return result.ok ? 'ok' : result.failure.code;
}

describe('reference frames', () => {
  test.each([welcome, prepare, runEnd, ask])('$kind is read and written by the byte', (message) => {
    const frame = referenceFrame(message.kind);
    expect(hex(encodeMessage(message))).toBe(hex(frame));
    expect(decodeToWorker(frame)).toEqual({ ok: true, value: message });
  });

  test.each([hello, answer, refusal])('$kind is read and written by the byte', (message) => {
    const frame = referenceFrame(message.kind);
    expect(hex(encodeMessage(message))).toBe(hex(frame));
    expect(decodeToCoordinator(frame)).toEqual({ ok: true, value: message });
  });
});

describe('vectors', () => {
  const evaluateAt = (point: Float64Array): ToWorker => ({
    ...ask,
    work: [
      {
        work: 'evaluate',
        problem: 0,
        part: null,
        points: [{ point, want: 'value' }],
        ownFit: null,
        sketch: null,
      },
    ],
  });

  test('a view into a larger array is sent as the view alone', () => {
    const whole = Float64Array.from([9, 1, 2, 9]);
    const view = whole.subarray(1, 3);
    expect(decodeToWorker(encodeMessage(evaluateAt(view)))).toEqual({
      ok: true,
      value: evaluateAt(Float64Array.from([1, 2])),
    });
  });

  test('a decoded vector does not share memory with the frame, at whatever offset the frame lies', () => {
    const frame = encodeMessage(evaluateAt(Float64Array.from([1, 2])));
    for (let offset = 0; offset < 8; offset++) {
      const buffer = new Uint8Array(frame.length + 8);
      buffer.set(frame, offset);
      const decoded = decodeToWorker(buffer.subarray(offset, offset + frame.length));
      buffer.fill(0);
      expect(decoded).toEqual({ ok: true, value: evaluateAt(Float64Array.from([1, 2])) });
    }
  });

  test('every bit of a double survives: subnormals, minus zero, the largest', () => {
    const values = Float64Array.from([5e-324, -0, 0, Number.MAX_VALUE, -2.2250738585072014e-308, 0.1]);
    const decoded = decodeToWorker(encodeMessage(evaluateAt(values)));
    if (!decoded.ok || decoded.value.kind !== 'ask' || decoded.value.work[0].work !== 'evaluate') {
      throw new Error('an ask to evaluate was expected');
    }
    const { point } = decoded.value.work[0].points[0];
    expect(hex(new Uint8Array(point.buffer, point.byteOffset, point.byteLength))).toBe(
      hex(new Uint8Array(values.buffer)),
    );
  });

  test.each([Number.NaN, Number.POSITIVE_INFINITY, Number.NEGATIVE_INFINITY])(
    'a vector with %d is refused by its field',
    (value) => {
      const decoded = decodeToWorker(encodeMessage(evaluateAt(Float64Array.from([1, value]))));
      expect(decoded).toMatchObject({
        ok: false,
        failure: { code: 'number-not-finite', where: { field: 'ask.work[0].points[0].point' } },
      });
    },
  );

  test.each([Number.NaN, Number.POSITIVE_INFINITY, Number.NEGATIVE_INFINITY])(
    'a single number %d is refused',
    (value) => {
      const message: ToWorker = {
        ...ask,
        work: [
          {
            work: 'evaluate',
            problem: 0,
            part: null,
            points: [{ point: new Float64Array(1), want: 'value' }],
            ownFit: { at: 0, hold: value },
            sketch: null,
          },
        ],
      };
      expect(codeOf(decodeToWorker(encodeMessage(message)))).toBe('number-not-finite');
    },
  );

  test('minus zero as a single number keeps its sign', () => {
    const point = { value: -0, gradient: null, diagonal: null, curvature: null };
    const decoded = decodeToCoordinator(
      encodeMessage({
        ...answer,
        work: [{ work: 'evaluate', problem: 0, points: [point], ownFit: null, sketch: null }],
      }),
    );
    if (!decoded.ok || decoded.value.kind !== 'answer' || decoded.value.work[0].work !== 'evaluate') {
      throw new Error('an evaluate answer was expected');
    }
    expect(Object.is(decoded.value.work[0].points[0].value, -0)).toBe(true);
  });
});

describe('messages that do not belong', () => {
  const disguised = (message: object): Uint8Array => encodeMessage(message as ToWorker);

  test('a kind that nobody knows', () => {
    expect(codeOf(decodeToWorker(disguised({ kind: 'shutdown' })))).toBe('message-unknown');
    expect(codeOf(decodeToCoordinator(disguised({ kind: 'shutdown' })))).toBe('message-unknown');
  });

  test('a kind of the other direction', () => {
    expect(codeOf(decodeToCoordinator(encodeMessage(ask)))).toBe('message-unknown');
    expect(codeOf(decodeToWorker(encodeMessage(answer)))).toBe('message-unknown');
  });

  test('hello and welcome of another version, even with other fields', () => {
    const later = { ...hello, version: 2, colour: 'blue' };
    expect(codeOf(decodeToCoordinator(disguised(later)))).toBe('version-unsupported');
    expect(codeOf(decodeToWorker(disguised({ ...welcome, version: 0 })))).toBe('version-unsupported');
  });

  test.each([
    ['no kind', { version: 1 }],
    ['a kind that is no text', { kind: 1 }],
    ['a field too many', { ...hello, colour: 'blue' }],
    ['a field missing', { kind: 'hello', version: 1 }],
    ['a version as text', { ...hello, version: '1' }],
    ['an array where a vector belongs', { ...answer, work: [{ work: 'factor', factors: [[1, 2, 3]] }] }],
    ['null where a vector belongs', { ...answer, work: [{ work: 'factor', factors: [null] }] }],
    ['unknown work', { ...answer, work: [{ work: 'guess' }] }],
    ['no work', { ...answer, work: [] }],
    ['an ask number of zero', { ...answer, ask: 0 }],
    ['an ask number that is no integer', { ...answer, ask: 1.5 }],
    ['a refusal with a code of its own', { ...refusal, code: 'too-tired' }],
  ])('%s', (_, message) => {
    expect(codeOf(decodeToCoordinator(disguised(message)))).toBe('frame-malformed');
  });
});
