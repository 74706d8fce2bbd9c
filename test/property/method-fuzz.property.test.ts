import { describe, expect, test } from 'vitest';
import { ADVERSARIAL, makeAdversarialProblem } from '../bench/adversarial-problems.js';
import { type FuzzRow, fuzzProblem } from '../bench/fuzz-case.js';
import { type MethodName, measureProblem } from '../bench/measure.js';
import { makeFuzzProblem } from '../bench/random-problems.js';

const tell = (row: FuzzRow): string => `${row.rung}, ${row.problem}: ${row.outcome}, ${row.reason}`;

describe('every run ends certified or with a name, and no certificate is contradicted by the pooled optimum', () => {
  test.each(Array.from({ length: 20 }, (_, k) => 1001 + k))('random problem %i', (seed) => {
    const rows = fuzzProblem(makeFuzzProblem(seed));
    expect(rows.length).toBeGreaterThanOrEqual(3);
    expect(rows.filter(({ verdict }) => verdict !== 'certified' && verdict !== 'named').map(tell)).toEqual(
      [],
    );
  });

  test.each(Object.keys(ADVERSARIAL).filter((_, k) => k % 7 === 5))('adversarial problem: %s', (name) => {
    const rows = fuzzProblem(makeAdversarialProblem(name));
    expect(rows.filter(({ verdict }) => verdict !== 'certified' && verdict !== 'named').map(tell)).toEqual(
      [],
    );
  });

  test.each([
    'separated classes, no penalty',
    'separated classes, no penalty, by response',
    'logistic, a level without events, no penalty',
    'poisson, a level without events, no penalty',
  ])('%s: every rung says so', (name) => {
    for (const row of fuzzProblem(makeAdversarialProblem(name)))
      expect([row.rung, row.outcome, row.reason]).toEqual([row.rung, 'unbounded', 'separable']);
  });
});

describe('rounds to a certified 1e-8', () => {
  const most: Partial<Record<MethodName, number>> = {
    pooled: 1,
    curvature: 7,
    proximal: 15,
    'proximal-only': 100,
  };
  test.each([
    'squared correlated lasso random 8',
    'logistic small none random 4',
    'logistic levels ridge by-response 4',
    'poisson small lasso sizes 8',
    'huber small lasso random 8',
  ])('%s', (name) => {
    for (const { method, rounds, contradicted } of measureProblem(name)) {
      const bound = most[method];
      if (bound === undefined) continue;
      expect(contradicted).toBe(false);
      expect(rounds['1e-8'] ?? Number.POSITIVE_INFINITY).toBeLessThanOrEqual(bound);
    }
  });
});
