import { expect, test } from 'vitest';
import { measureRound, roundsOf } from '../bench/wire-frames.js';

test('a small run of bench:wire: no round has more bytes than 8 n (1 + 1 %) + 300 for each problem', () => {
  for (const [p, problems] of [
    [100, 1],
    [10_000, 3],
  ] as const)
    for (const round of roundsOf(p, problems))
      for (const { name, direction, ofAllowed, ratio, encodeMs, decodeMs } of measureRound(round, 1, () =>
        performance.now(),
      )) {
        expect(ofAllowed, `${name}, ${direction}`).toBeLessThanOrEqual(1);
        expect(ratio, `${name}, ${direction}`).toBeGreaterThan(1);
        expect(encodeMs + decodeMs, `${name}, ${direction}`).toBeGreaterThan(0);
      }
});
