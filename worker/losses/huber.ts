import type { Loss } from './loss.js';

/**
 * Huber's loss (Huber 1964) with a fixed threshold t in the units of the response: ½ r² for |r| ≤ t, t |r| − ½ t²
 * beyond, r = y − η. Its curvature is 1 within the threshold and 0 beyond.
 */
export const huber = (threshold: number): Loss => ({
  name: 'huber',
  threshold,
  quadratic: false,
  value: (y, eta) => {
    const r = Math.abs(y - eta);
    return r <= threshold ? 0.5 * r * r : threshold * r - 0.5 * threshold * threshold;
  },
  slope: (y, eta) => Math.min(Math.max(eta - y, -threshold), threshold),
  curvature: (y, eta) => (Math.abs(y - eta) <= threshold ? 1 : 0),
  mean: (eta) => eta,
  meanSlope: () => 1,
  meanBend: () => 0,
  variance: () => 1,
  saturated: () => 0,
});
