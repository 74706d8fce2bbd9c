import { expect, test } from 'vitest';
import type { FitProblem } from '../bench/fit-problems.js';
import { GAP_MOST, hasPooledFit, measureFit } from '../bench/fit-runs.js';

const SMALL: FitProblem = {
  name: 'squared elastic net 600×4',
  loss: 'squared',
  rowCount: 600,
  columns: 4,
  lambda: 0.05,
  l1: 0.5,
  folds: 0,
  matrices: 3,
};

test('a small run of bench:fit: through real processes, and beside the pooled fit where R is', {
  timeout: 90_000,
}, async () => {
  const pooled = hasPooledFit();
  const times = await measureFit(SMALL, 1, pooled);
  expect(times.gap).toBeLessThanOrEqual(GAP_MOST);
  expect(times.rounds).toBeGreaterThan(0);
  expect(times.secondsWithLoading).toBeGreaterThanOrEqual(times.seconds);
  if (!pooled) return;
  // the same objective: neither program finds coefficients that the other's are far from
  expect(Math.abs(times.pooledGap ?? Number.NaN)).toBeLessThanOrEqual(GAP_MOST);
  expect(times.ratio).toBeGreaterThan(0);
});
