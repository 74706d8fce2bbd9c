import type { Loss } from './loss.js';

/** t ln t, continued by its limit 0 at t = 0. */
const entropyTerm = (t: number): number => (t > 0 ? t * Math.log(t) : 0);

/** μ (1 − μ). */
const spread = (eta: number): number => {
  const e = Math.exp(-Math.abs(eta));
  return e / ((1 + e) * (1 + e));
};

/**
 * ln(1 + e^η) − y η, y in [0, 1]: minus the log-likelihood of a binary response with a logit link (McCullagh and Nelder
 * 1989, §4). Written with e^−|η| only, so that nothing overflows and the slope keeps its relative precision in both
 * tails.
 */
export const logistic: Loss = {
  name: 'logistic',
  threshold: 0,
  quadratic: false,
  value: (y, eta) => Math.max(eta, 0) - y * eta + Math.log1p(Math.exp(-Math.abs(eta))),
  slope: (y, eta) => {
    const e = Math.exp(-Math.abs(eta));
    const tail = e / (1 + e);
    return eta >= 0 ? 1 - y - tail : tail - y;
  },
  curvature: (_y, eta) => spread(eta),
  mean: (eta) => {
    const e = Math.exp(-Math.abs(eta));
    return eta >= 0 ? 1 / (1 + e) : e / (1 + e);
  },
  meanSlope: spread,
  // μ(1 − μ)(1 − 2μ), with 1 − 2μ = −tanh(η/2)
  meanBend: (eta) => -spread(eta) * Math.tanh(eta / 2),
  variance: (mean) => mean * (1 - mean),
  saturated: (y) => -entropyTerm(y) - entropyTerm(1 - y),
};
