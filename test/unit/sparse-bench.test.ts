import { expect, test } from 'vitest';
import { plainVariant } from '../../numerics/kernels/plain.js';
import { sparseTimes } from '../bench/sparse-times.js';

test('a small run of bench:sparse times rows by their entries against rows in full at every shape', () => {
  const times = sparseTimes(plainVariant, { numbers: 20_000, repeats: 2 }, () => performance.now());
  expect(times.length).toBe(16);
  for (const { name, ratio, nanosecondsPerEntry } of times) {
    expect(ratio, name).toBeGreaterThan(0);
    expect(Number.isFinite(ratio * nanosecondsPerEntry), name).toBe(true);
  }
});
