/**
 * A loss as a function of the linear predictor η for one row. Constants that do not depend on η are dropped, so that
 * values are comparable only under the formula given in each file.
 */
export interface Loss {
  readonly name: string;
  /** True where the curvature does not depend on η: one factorisation serves every round. */
  readonly quadratic: boolean;
  value(y: number, eta: number): number;
  /** ∂/∂η. */
  slope(y: number, eta: number): number;
  /** ∂²/∂η², never negative. */
  curvature(y: number, eta: number): number;
  /** The mean response at η: the inverse link. */
  mean(eta: number): number;
  /** The value at the η that is best for this row alone (a limit where it is not attained). */
  saturated(y: number): number;
}
