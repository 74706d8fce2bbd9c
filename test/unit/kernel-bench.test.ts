import { expect, test } from 'vitest';
import { kernelTimes } from '../bench/kernel-times.js';

test('a small run of bench:kernels measures every kernel against its limit, its twin and two threads', async () => {
  const nowMs = () => performance.now();
  const times = await kernelTimes(
    { rows: 0.01, repeats: 2, threadRepeats: 2 },
    { cpuMs: nowMs, wallMs: nowMs },
  );
  expect(new Set(times.map(({ kernel }) => kernel))).toEqual(new Set(['simd', 'relaxed']));
  const [alone, shared] = [1, 2].map((threads) => times.filter((time) => time.threads === threads));
  expect(alone.length).toBe(2 * (1 + 2 + 4 + 4));
  expect(shared.length).toBe(2 * (1 + 1 + 4 + 4));
  for (const { name, ratio, timesPlain } of times) {
    expect(ratio, name).toBeGreaterThan(0);
    expect(timesPlain ?? 1, name).toBeGreaterThan(0);
    expect(Number.isFinite(ratio * (timesPlain ?? 1)), name).toBe(true);
  }
}, 60_000);
