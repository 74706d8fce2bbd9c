/** Solver columns as the coefficients of the report: θ_j multiplies (x_j − center_j) / scale_j. */
export interface Columns {
  /** Names in the order of the solver columns; `(intercept)` first where there is one. */
  readonly names: readonly string[];
  readonly intercept: boolean;
  /** Per slope. */
  readonly center: Float64Array;
  readonly scale: Float64Array;
}

/** T θ: coefficients on the original scale, b_j = θ_j / scale_j and b₀ = θ₀ − Σ center_j b_j. */
export function coefficientsOf({ intercept, center, scale }: Columns, theta: Float64Array): Float64Array {
  if (!intercept) return theta.map((value, j) => value / scale[j]);
  const out = Float64Array.from(theta);
  for (let j = 0; j < scale.length; j++) {
    out[j + 1] = theta[j + 1] / scale[j];
    out[0] -= center[j] * out[j + 1];
  }
  return out;
}

/** T C Tᵀ of a covariance of θ, row-major p × p. */
export function covarianceOnOriginal(columns: Columns, covariance: Float64Array): Float64Array {
  const p = columns.names.length;
  const half = new Float64Array(p * p);
  for (let j = 0; j < p; j++) {
    const column = coefficientsOf(
      columns,
      Float64Array.from({ length: p }, (_, i) => covariance[i * p + j]),
    );
    for (let i = 0; i < p; i++) half[i * p + j] = column[i];
  }
  const out = new Float64Array(p * p);
  for (let i = 0; i < p; i++) out.set(coefficientsOf(columns, half.slice(i * p, (i + 1) * p)), i * p);
  return out.map((value, at) => 0.5 * (value + out[(at % p) * p + Math.floor(at / p)]));
}
