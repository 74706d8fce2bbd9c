import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { decodeToCoordinator, decodeToWorker, encodeMessage } from '../../protocol/codec.js';
import type { FailureCode } from '../../protocol/failure.js';
import { arbitraryToCoordinator, arbitraryToWorker } from '../support/arbitrary-messages.js';
import { toCoordinatorMessages, toWorkerMessages } from '../support/messages.js';

const frames = [...toWorkerMessages, ...toCoordinatorMessages].map(encodeMessage);
const wireCodes: ReadonlySet<FailureCode> = new Set([
  'frame-malformed',
  'frame-too-large',
  'message-unknown',
  'version-unsupported',
  'number-not-finite',
]);

/** Both readers give a value or one of the codes of the wire; neither throws. Returns how many gave a value. */
function readBoth(bytes: Uint8Array): number {
  let accepted = 0;
  for (const result of [decodeToWorker(bytes), decodeToCoordinator(bytes)]) {
    if (result.ok) accepted++;
    else if (!wireCodes.has(result.failure.code)) throw new Error(`${result.failure.code} of a frame`);
  }
  return accepted;
}

describe('round trip', () => {
  test('every message to a worker is read as it was written', () => {
    fc.assert(
      fc.property(arbitraryToWorker, (message) => {
        expect(decodeToWorker(encodeMessage(message))).toEqual({ ok: true, value: message });
      }),
    );
  });

  test('every message to a coordinator is read as it was written', () => {
    fc.assert(
      fc.property(arbitraryToCoordinator, (message) => {
        expect(decodeToCoordinator(encodeMessage(message))).toEqual({ ok: true, value: message });
      }),
    );
  });

  test('the frame of a message that was read is the frame it was read from', () => {
    fc.assert(
      fc.property(arbitraryToWorker, (message) => {
        const frame = encodeMessage(message);
        const read = decodeToWorker(frame);
        expect(read.ok && Buffer.compare(encodeMessage(read.value), frame)).toBe(0);
      }),
    );
  });
});

describe('damaged frames', () => {
  test('every truncation is refused', () => {
    for (const frame of frames) {
      for (let length = 0; length < frame.length; length++) {
        expect(readBoth(frame.subarray(0, length))).toBe(0);
      }
    }
  });

  test('every byte appended is refused', () => {
    for (const frame of frames) {
      for (let byte = 0; byte < 256; byte++) expect(readBoth(Uint8Array.from([...frame, byte]))).toBe(0);
    }
  });

  test('bits flipped in every byte give a value or a code, never an exception', () => {
    for (const frame of frames) {
      for (let at = 0; at < frame.length; at++) {
        for (const bit of [0, 5, 7]) {
          const damaged = frame.slice();
          damaged[at] ^= 1 << bit;
          readBoth(damaged);
        }
      }
    }
  });

  test('several bytes overwritten give a value or a code, never an exception', () => {
    const overwritten = fc.array(fc.tuple(fc.nat(), fc.integer({ min: 0, max: 255 })), {
      minLength: 1,
      maxLength: 6,
    });
    fc.assert(
      fc.property(fc.constantFrom(...frames), overwritten, (frame, changes) => {
        const damaged = frame.slice();
        for (const [at, byte] of changes) damaged[at % damaged.length] = byte;
        readBoth(damaged);
      }),
      { numRuns: 2000 },
    );
  });

  test('bytes at random are refused', () => {
    fc.assert(
      fc.property(fc.uint8Array({ maxLength: 200 }), (bytes) => {
        expect(readBoth(bytes)).toBe(0);
      }),
      { numRuns: 1000 },
    );
  });
});
