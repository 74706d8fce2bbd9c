import type { Loss } from './loss.js';

/** ½ (y − η)²: least squares. */
export const squared: Loss = {
  name: 'squared',
  threshold: 0,
  quadratic: true,
  value: (y, eta) => 0.5 * (y - eta) * (y - eta),
  slope: (y, eta) => eta - y,
  curvature: () => 1,
  mean: (eta) => eta,
  meanSlope: () => 1,
  meanBend: () => 0,
  variance: () => 1,
  saturated: () => 0,
};
