import { logGamma } from '../../numerics/distributions.js';
import type { LossForm } from '../../protocol/specification/types.js';

export type Criterion = 'aic' | 'bic' | 'extended-bic';

/**
 * −2 log-likelihood up to a constant, plus a price per degree of freedom: AIC (Akaike 1974), BIC (Schwarz 1978), extended
 * BIC with γ = 1 (Chen and Chen 2008). For a squared loss the variance is profiled out: N ln(deviance / N).
 *
 * `degreesOfFreedom`: coefficients that are not zero (Zou, Hastie, Tibshirani 2007), intercept counted; `columns`: slopes
 * there are to choose from.
 */
export function criterionValue(
  criterion: Criterion,
  loss: LossForm['kind'],
  fit: {
    readonly deviance: number;
    readonly rows: number;
    readonly degreesOfFreedom: number;
    readonly slopes: number;
    readonly columns: number;
  },
): number {
  const { deviance, rows, degreesOfFreedom, slopes, columns } = fit;
  const misfit = loss === 'squared' ? rows * Math.log(deviance / rows) : deviance;
  if (criterion === 'aic') return misfit + 2 * degreesOfFreedom;
  const bic = misfit + Math.log(rows) * degreesOfFreedom;
  return criterion === 'bic' ? bic : bic + 2 * logChoose(columns, slopes);
}

/** ln of the number of ways to choose k of n. */
const logChoose = (n: number, k: number): number => logGamma(n + 1) - logGamma(k + 1) - logGamma(n - k + 1);
