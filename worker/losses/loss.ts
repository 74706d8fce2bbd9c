/**
 * A loss as a function of the linear predictor η for one row. Constants that do not depend on η are dropped, so that
 * values are comparable only under the formula given in each file.
 */
export interface Loss {
  readonly name: string;
  /** Of Huber's loss, in units of the response; 0 for the others. */
  readonly threshold: number;
  /** True where the curvature does not depend on η: one factorisation serves every round. */
  readonly quadratic: boolean;
  value(y: number, eta: number): number;
  /** ∂/∂η. */
  slope(y: number, eta: number): number;
  /** ∂²/∂η², never negative. */
  curvature(y: number, eta: number): number;
  /** The mean response at η: the inverse link. */
  mean(eta: number): number;
  /** First and second derivative of the mean by η. */
  meanSlope(eta: number): number;
  meanBend(eta: number): number;
  /** Variance of a response with this mean, up to the dispersion (McCullagh and Nelder 1989, §2.2). */
  variance(mean: number): number;
  /** The value at the η that is best for this row alone (a limit where it is not attained). */
  saturated(y: number): number;
}
