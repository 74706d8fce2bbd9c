import { expect, test } from 'vitest';
import { debiasedIntervals } from '../../coordinator/run/debiased.js';
import type { Description } from '../../coordinator/run/description.js';
import type { Grounds } from '../../coordinator/run/problems.js';

/**
 * With so many rows that the nodewise penalty √(ln p / N) vanishes, the approximate inverse is the inverse: the de-biased
 * estimate of a squared loss is then the least-squares one, θ − H⁻¹∇f, with variance H⁻¹ φ / N.
 */
test('without a nodewise penalty the de-biased estimate is the unpenalised one', () => {
  const rows = 1e18;
  const h = Float64Array.of(2, 0.6, 0.6, 1);
  // det = 1.64
  const inverse = [1 / 1.64, -0.6 / 1.64, -0.6 / 1.64, 2 / 1.64];
  const theta = Float64Array.of(0.4, 0);
  const gradient = Float64Array.of(-0.2, 0.1);
  const description = {
    curvature: h,
    columns: { names: ['age_years', 'depth_m'], intercept: false, scale: Float64Array.of(2, 0.5) },
    end: { z: theta },
    scores: [{ gradient, meat: null }],
    members: null,
  } as unknown as Description;
  const grounds = { survey: { rowsTotal: rows }, frame: { p: 2 } } as unknown as Grounds;
  const basis = { level: 0.95, degreesOfFreedom: null, dispersion: { kind: 'residual', value: 3 } } as const;
  const [age, depth] = debiasedIntervals(grounds, description, {
    ...basis,
    used: 'model',
    covariance: new Float64Array(4),
  });
  const newton = [0.4 - (inverse[0] * -0.2 + inverse[1] * 0.1), 0 - (inverse[2] * -0.2 + inverse[3] * 0.1)];
  expect(age.estimate).toBeCloseTo(newton[0] / 2, 8);
  expect(depth.estimate).toBeCloseTo(newton[1] / 0.5, 8);
  expect(age.standardError * Math.sqrt(rows)).toBeCloseTo(Math.sqrt(3 * inverse[0]) / 2, 7);
  expect(depth.standardError * Math.sqrt(rows)).toBeCloseTo(Math.sqrt(3 * inverse[3]) / 0.5, 7);
});
