import { describe, expect, test } from 'vitest';
import { lossNamed } from '../../worker/losses/index.js';
import type { Loss } from '../../worker/losses/loss.js';

const squared = lossNamed('squared');
const logistic = lossNamed('logistic');
const poisson = lossNamed('poisson');

const CASES: readonly (readonly [Loss, readonly number[]])[] = [
  [squared, [-3, 0, 2.5]],
  [logistic, [0, 0.3, 1]],
  [poisson, [0, 1, 17]],
];
const ETAS = [-6, -1.3, -1e-3, 0, 0.4, 2, 5.5];

describe.each(CASES)('$name loss', (loss, responses) => {
  test('slope and curvature are the derivatives of the value', () => {
    const h = 1e-5;
    for (const y of responses) {
      for (const eta of ETAS) {
        const slope = (loss.value(y, eta + h) - loss.value(y, eta - h)) / (2 * h);
        const curvature = (loss.slope(y, eta + h) - loss.slope(y, eta - h)) / (2 * h);
        const size = 1 + Math.abs(loss.value(y, eta));
        expect(Math.abs(loss.slope(y, eta) - slope) / size).toBeLessThan(1e-9);
        expect(Math.abs(loss.curvature(y, eta) - curvature) / size).toBeLessThan(1e-9);
      }
    }
  });

  test('the slope is mean minus response (canonical link)', () => {
    for (const y of responses) {
      for (const eta of ETAS) {
        expect(loss.slope(y, eta)).toBeCloseTo(loss.mean(eta) - y, 12);
      }
    }
  });

  test('no predictor goes below the saturated value', () => {
    for (const y of responses) {
      for (const eta of ETAS) {
        expect(loss.value(y, eta)).toBeGreaterThanOrEqual(loss.saturated(y) - 1e-14);
      }
    }
  });
});

describe('squared loss', () => {
  test('is half the squared residual', () => {
    expect(squared.value(5, 2)).toBe(4.5);
    expect(squared.saturated(5)).toBe(0);
    expect(squared.quadratic).toBe(true);
  });
});

describe('logistic loss', () => {
  test('is ln 2 at an even chance', () => {
    expect(logistic.value(1, 0)).toBe(Math.LN2);
    expect(logistic.value(0, 0)).toBe(Math.LN2);
  });

  test('is the same for a success at η and a failure at −η', () => {
    for (const eta of ETAS) {
      expect(logistic.value(1, eta)).toBeCloseTo(logistic.value(0, -eta), 14);
      expect(logistic.slope(1, eta)).toBe(-logistic.slope(0, -eta));
    }
  });

  test('has the curvature of a Bernoulli variance, mean · (1 − mean)', () => {
    for (const eta of ETAS) {
      const mean = logistic.mean(eta);
      expect(logistic.curvature(0, eta)).toBeCloseTo(mean * (1 - mean), 14);
    }
  });

  test('keeps relative precision in both tails and never overflows', () => {
    expect(logistic.value(1, -750)).toBe(750);
    expect(logistic.value(0, 1e6)).toBe(1e6);
    expect(logistic.value(1, 40) / Math.exp(-40)).toBeCloseTo(1, 12);
    expect(logistic.slope(1, 40) / -Math.exp(-40)).toBeCloseTo(1, 12);
    expect(logistic.slope(0, -40) / Math.exp(-40)).toBeCloseTo(1, 12);
    for (const eta of [-1e308, -800, 800, 1e308]) {
      for (const y of [0, 1]) {
        for (const part of [logistic.value, logistic.slope, logistic.curvature]) {
          expect(Number.isFinite(part(y, eta))).toBe(true);
        }
        expect(logistic.curvature(y, eta)).toBeGreaterThanOrEqual(0);
      }
    }
  });

  test('is saturated at the negative entropy: 0 for a pure response, ln 2 for one half', () => {
    expect(logistic.saturated(0)).toBeCloseTo(0, 15);
    expect(logistic.saturated(1)).toBeCloseTo(0, 15);
    expect(logistic.saturated(0.5)).toBeCloseTo(Math.LN2, 15);
    expect(logistic.value(0.3, Math.log(0.3 / 0.7))).toBeCloseTo(logistic.saturated(0.3), 14);
  });
});

describe('Poisson loss', () => {
  test('is saturated at η = ln y', () => {
    expect(poisson.value(7, Math.log(7))).toBeCloseTo(poisson.saturated(7), 12);
    expect(poisson.saturated(0)).toBe(0);
  });

  test('doubled and measured from the saturated value it is the Poisson deviance', () => {
    const mu = 3.2;
    for (const y of [1, 2, 9]) {
      const deviance = 2 * (y * Math.log(y / mu) - (y - mu));
      expect(2 * (poisson.value(y, Math.log(mu)) - poisson.saturated(y))).toBeCloseTo(deviance, 12);
    }
  });

  test('far out it is huge, finite and still convex', () => {
    for (const eta of [299.5, 301, 1e4, 1e100]) {
      expect(Number.isFinite(poisson.value(3, eta))).toBe(true);
      expect(Number.isFinite(poisson.curvature(3, eta))).toBe(true);
      expect(poisson.value(3, eta)).toBeGreaterThan(1e129);
    }
    const around = [298, 299, 300, 301, 302].map((eta) => poisson.value(3, eta));
    for (let i = 1; i < 4; i++) {
      expect(around[i - 1] + around[i + 1]).toBeGreaterThanOrEqual(2 * around[i] * (1 - 1e-15));
    }
    expect(poisson.value(3, 301) - poisson.value(3, 300)).toBeCloseTo(poisson.slope(3, 300.5), -120);
    expect(poisson.value(4, -1e5)).toBe(4e5);
  });
});
