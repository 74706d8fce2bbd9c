import { describe, expect, test } from 'vitest';
import { lossOf } from '../../worker/losses/index.js';
import type { Loss } from '../../worker/losses/loss.js';

const squared = lossOf({ kind: 'squared' });
const logistic = lossOf({ kind: 'logistic' });
const poisson = lossOf({ kind: 'poisson' });

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

describe("Huber's loss", () => {
  const t = 1.345;
  const huber = lossOf({ kind: 'huber', threshold: t });
  // residuals within, at and beyond the threshold, on both sides of it
  const residuals = [-9, -1.4, -t, -1.3, -0.2, 0, 0.7, 1.3, t, 1.4, 40];

  test('slope and curvature are the derivatives of the value away from the threshold', () => {
    const h = 1e-6;
    for (const r of residuals) {
      if (Math.abs(r) === t) continue;
      const eta = 5 - r;
      const slope = (huber.value(5, eta + h) - huber.value(5, eta - h)) / (2 * h);
      const curvature = (huber.slope(5, eta + h) - huber.slope(5, eta - h)) / (2 * h);
      expect(huber.slope(5, eta)).toBeCloseTo(slope, 7);
      expect(huber.curvature(5, eta)).toBeCloseTo(curvature, 7);
    }
  });

  test('is ½ r² within the threshold and t |r| − ½ t² beyond (Huber 1964)', () => {
    expect(huber.value(5, 4)).toBe(0.5);
    expect(huber.value(5, 15)).toBeCloseTo(t * 10 - 0.5 * t * t, 14);
    expect(huber.value(5, 5 + t)).toBeCloseTo(0.5 * t * t, 14);
    expect(huber.saturated(5)).toBe(0);
    expect(huber.quadratic).toBe(false);
  });

  test('its slope is the residual clipped to the threshold, sign turned', () => {
    for (const r of residuals)
      expect(huber.slope(5, 5 - r)).toBeCloseTo(-Math.sign(r) * Math.min(Math.abs(r), t), 14);
  });

  test('is the infimal convolution of ½ s² and t |r − s|: what is left after the best s is cut off', () => {
    for (const r of residuals) {
      // the best s is r clipped to the threshold; none on a fine grid does better
      const grid = Array.from({ length: 4001 }, (_, i) => -10 + i / 80);
      const least = Math.min(...grid.map((s) => 0.5 * s * s + t * Math.abs(r - s)));
      const best = Math.max(-t, Math.min(t, r));
      const value = huber.value(0, -r);
      expect(0.5 * best * best + t * Math.abs(r - best)).toBeCloseTo(value, 13);
      expect(least).toBeGreaterThanOrEqual(value - 1e-13);
    }
  });

  test('scales as its residual: with threshold c·t, loss(c·r) = c² · loss(r)', () => {
    const scaled = lossOf({ kind: 'huber', threshold: 3 * t });
    for (const r of residuals) expect(scaled.value(0, 3 * r)).toBeCloseTo(9 * huber.value(0, r), 11);
  });

  test('is least squares under a threshold that no residual reaches', () => {
    const wide = lossOf({ kind: 'huber', threshold: 100 });
    for (const r of residuals)
      for (const part of ['value', 'slope', 'curvature'] as const)
        expect(wide[part](2, 2 - r)).toBe(squared[part](2, 2 - r));
  });

  test('far out it is huge, finite and its slope stays the threshold', () => {
    expect(huber.value(1e70, -1e160)).toBeCloseTo(t * 1e160, -150);
    expect(huber.slope(1e70, -1e160)).toBe(-t);
    expect(huber.curvature(1e70, -1e160)).toBe(0);
  });
});
