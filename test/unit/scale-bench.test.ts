import { expect, test } from 'vitest';
import { measureScale } from '../bench/scale-coordinator.js';

test('a small run of bench:scale: a fit over light workers is solved, and every round is measured', async () => {
  const figures = await measureScale({
    rung: 'proximal',
    p: 50,
    siteCount: 4,
    roundsMost: 40,
    tolerance: 1e-8,
    repeats: 1,
    echoRounds: 5,
  });
  expect(figures).toMatchObject({ outcome: 'solved', p: 50, siteCount: 4 });
  expect(figures.relativeGap).toBeLessThanOrEqual(1e-8);
  expect(Object.keys(figures.cpuMs).sort()).toEqual(['evaluate', 'proximal', 'survey']);
  expect(figures.echoCpuMs).toBeGreaterThan(0);
  expect(figures.ratio).toBeGreaterThan(0);
  // what 4 sites of 50 columns send in a round, and little more
  expect(figures.journalBytesPerRound).toBeGreaterThan(4 * 50 * 8);
}, 60_000);
