import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { peerKey } from '../../coordinator/service/peer-address.js';
import { RateLimiter } from '../../coordinator/service/rate.js';

describe('a rate limiter', () => {
  test('lets a burst through, then so many a minute, and says when the next is due', () => {
    const limiter = new RateLimiter({ burst: 3, perMinute: 6 });
    expect([1, 2, 3].map(() => limiter.take('a', 0))).toEqual([0, 0, 0]);
    expect(limiter.take('a', 0)).toBe(10_000);
    expect(limiter.take('a', 4000)).toBe(6000);
    expect(limiter.take('a', 10_000)).toBe(0);
    expect(limiter.take('a', 10_000)).toBe(10_000);
    expect([1, 2, 3, 4].map(() => limiter.take('a', 3_600_000))).toEqual([0, 0, 0, 10_000]);
  });

  test('one key does not hold up another', () => {
    const limiter = new RateLimiter({ burst: 1, perMinute: 1 });
    expect(limiter.take('a', 0)).toBe(0);
    expect(limiter.take('b', 0)).toBe(0);
    expect(limiter.take('a', 0)).toBeGreaterThan(0);
  });

  test('keeps no more keys than it may; the one used last is kept', () => {
    const limiter = new RateLimiter({ burst: 1, perMinute: 1 }, 100);
    limiter.take('kept', 0);
    for (let key = 0; key < 10_000; key++) {
      limiter.take(String(key), 0);
      limiter.take('kept', 0);
    }
    expect(limiter.size).toBe(100);
    expect(limiter.take('kept', 0)).toBeGreaterThan(0);
  });

  test('in any time span it lets through at most the burst and what the span brings, and never none for ever', () => {
    const gaps = fc.array(fc.integer({ min: 0, max: 20_000 }), { minLength: 1, maxLength: 200 });
    fc.assert(
      fc.property(
        gaps,
        fc.integer({ min: 1, max: 20 }),
        fc.integer({ min: 1, max: 300 }),
        (gapsMs, burst, perMinute) => {
          const limiter = new RateLimiter({ burst, perMinute });
          let nowMs = 0;
          const taken: number[] = [];
          for (const gapMs of gapsMs) {
            nowMs += gapMs;
            const waitMs = limiter.take('a', nowMs);
            if (waitMs === 0) taken.push(nowMs);
            else expect(waitMs).toBeLessThanOrEqual(60_000 / perMinute + 1e-6);
          }
          for (let from = 0; from < taken.length; from++) {
            for (let to = from; to < taken.length; to++) {
              const most = burst + ((taken[to] - taken[from]) * perMinute) / 60_000;
              expect(to - from + 1).toBeLessThanOrEqual(most + 1e-6);
            }
          }
          expect(limiter.take('a', nowMs + 60_000 / perMinute + 1)).toBe(0);
        },
      ),
      { numRuns: 50 },
    );
  });
});

test.each([
  ['192.0.2.7', '192.0.2.7'],
  ['::ffff:192.0.2.7', '192.0.2.7'],
  ['::1', '0:0:0:0::/64'],
  ['2001:db8:1:2:3:4:5:6', '2001:db8:1:2::/64'],
  ['2001:db8:1:2::9', '2001:db8:1:2::/64'],
  ['2001:db8::9', '2001:db8:0:0::/64'],
  ['fe80::1%eth0', 'fe80:0:0:0::/64'],
  [undefined, 'unknown'],
])('address %s counts as %s', (address, key) => {
  expect(peerKey(address)).toBe(key);
});
