import { expect, test } from 'vitest';
import { kernelTimes } from '../bench/kernel-times.js';

test('a small run of bench:kernels measures every kernel against its limit and its twin', async () => {
  const times = await kernelTimes({ rows: 0.01, repeats: 2 }, () => performance.now());
  expect(new Set(times.map(({ kernel }) => kernel))).toEqual(new Set(['simd', 'relaxed']));
  expect(times.length).toBe(2 * (1 + 2 + 4 + 4));
  for (const { name, ratio, timesPlain } of times) {
    expect(ratio, name).toBeGreaterThan(0);
    expect(timesPlain, name).toBeGreaterThan(0);
    expect(Number.isFinite(ratio * timesPlain), name).toBe(true);
  }
}, 60_000);
