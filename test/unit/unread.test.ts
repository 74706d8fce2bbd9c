import { describe, expect, test } from 'vitest';
import { MeteredLink, REPLIES_SPARE } from '../../coordinator/service/metered-link.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { LIMITS } from '../../protocol/limits.js';
import { memoryLinks } from '../../protocol/link/memory.js';
import { UnreadWatch } from '../../protocol/link/unread.js';
import { hello } from '../support/messages.js';

describe('a peer that does not read', () => {
  const ALLOWED_MS = 120_000;
  const { readBytesPerSecondLeast } = LIMITS;

  /** Looks every ten seconds at what `waiting` says waits; the time at which the peer was given up, or null. */
  function givenUpAtMs(queued: (ms: number) => number, waiting: (ms: number) => number): number | null {
    const watch = new UnreadWatch(ALLOWED_MS);
    for (let ms = 0; ms <= 3_600_000; ms += 10_000) {
      if (watch.overdue(ms, queued(ms), waiting(ms))) return ms;
    }
    return null;
  }

  test('is given up after the silence allowed and the time its bytes may take', () => {
    const bytes = 60 * readBytesPerSecondLeast;
    expect(
      givenUpAtMs(
        () => bytes,
        () => bytes,
      ),
    ).toBe(ALLOWED_MS + 60_000);
  });

  test('is given up too where more and more is queued for it', () => {
    const queued = (ms: number): number => 1000 + ms;
    expect(givenUpAtMs(queued, queued)).toBe(130_000);
  });

  test('is kept where it takes a large frame at the least pace, or keeps up with what comes', () => {
    const large = 1000 * readBytesPerSecondLeast;
    const left = (ms: number): number => Math.max(0, large - (ms / 1000) * readBytesPerSecondLeast);
    expect(givenUpAtMs(() => large, left)).toBeNull();
    expect(
      givenUpAtMs(
        (ms) => 1000 + ms,
        () => 500,
      ),
    ).toBeNull();
    expect(
      givenUpAtMs(
        () => 5e9,
        () => 0,
      ),
    ).toBeNull();
  });
});

describe('a peer that answers more than it was asked', () => {
  const refusal = {
    kind: 'refusal',
    run: 'r',
    ask: 1,
    code: 'internal',
    message: 'no',
    remedy: null,
  } as const;

  test('is closed once the spare is used up; honest replies do not use it', () => {
    const deliveries: (() => void)[] = [];
    const deliver = (run: () => void): void => void deliveries.push(run);
    const settle = (): void => {
      for (let next = deliveries.shift(); next !== undefined; next = deliveries.shift()) next();
    };
    const ends = memoryLinks(deliver);
    const metered = new MeteredLink(ends.coordinator);
    let taken = 0;
    metered.onMessage(() => {
      taken += 1;
    });
    const closings: number[] = [];
    ends.worker.onMessage(() => undefined);
    ends.worker.onClose((code) => closings.push(code));
    ends.worker.send(hello);
    for (let ask = 1; ask <= 500; ask++) {
      metered.send({ kind: 'ask', run: 'r', ask, work: [{ work: 'survey' }] });
      ends.worker.send({ ...refusal, ask });
      settle();
    }
    for (let spare = 0; spare < REPLIES_SPARE; spare++) ends.worker.send(refusal);
    settle();
    expect(taken).toBe(1 + 500 + REPLIES_SPARE);
    expect(closings).toEqual([]);
    ends.worker.send(refusal);
    settle();
    expect(taken).toBe(1 + 500 + REPLIES_SPARE);
    expect(closings).toEqual([CLOSE_CODES.messageUnexpected]);
  });
});
