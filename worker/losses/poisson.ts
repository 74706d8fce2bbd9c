import type { Loss } from './loss.js';

/** Largest exponent taken: a trial point far out gets a huge finite value, which no line search accepts. */
const EXPONENT_MOST = 300;

const cappedExp = (eta: number): number => Math.exp(Math.min(eta, EXPONENT_MOST));

/**
 * e^η − y η, y ≥ 0: minus the log-likelihood of counts with a log link, without ln y! (McCullagh and Nelder 1989, §6).
 * Above the cap the value goes on along its tangent, so that it stays convex and the slope stays its derivative; the
 * curvature there is the one at the cap.
 */
export const poisson: Loss = {
  name: 'poisson',
  threshold: 0,
  quadratic: false,
  value: (y, eta) => cappedExp(eta) * (1 + Math.max(eta - EXPONENT_MOST, 0)) - y * eta,
  slope: (y, eta) => cappedExp(eta) - y,
  curvature: (_y, eta) => cappedExp(eta),
  mean: cappedExp,
  meanSlope: cappedExp,
  meanBend: cappedExp,
  variance: (mean) => mean,
  saturated: (y) => (y > 0 ? y - y * Math.log(y) : 0),
};
