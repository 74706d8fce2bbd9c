/**
 * The separable part g of the objective on solver columns:
 * g(z) = Σ_j l1_j |z_j| + ½ l2_j z_j², with lower_j ≤ z_j ≤ upper_j. All vectors of length p.
 */
export interface Penalty {
  readonly l1: Float64Array;
  readonly l2: Float64Array;
  readonly lower: Float64Array;
  readonly upper: Float64Array;
}

/** No penalty, no bounds. */
export const noPenalty = (p: number): Penalty => ({
  l1: new Float64Array(p),
  l2: new Float64Array(p),
  lower: new Float64Array(p).fill(Number.NEGATIVE_INFINITY),
  upper: new Float64Array(p).fill(Number.POSITIVE_INFINITY),
});

export function penaltyValue(g: Penalty, z: Float64Array): number {
  let sum = 0;
  for (let j = 0; j < z.length; j++) sum += g.l1[j] * Math.abs(z[j]) + 0.5 * g.l2[j] * z[j] * z[j];
  return sum;
}

/** True where g is a quadratic: a z-step is then one linear solve. */
export function isSmooth(g: Penalty): boolean {
  return (
    g.l1.every((weight) => weight === 0) &&
    g.lower.every((bound) => bound === Number.NEGATIVE_INFINITY) &&
    g.upper.every((bound) => bound === Number.POSITIVE_INFINITY)
  );
}

/** The minimiser of ½ a z² − b z + g_j(z): soft threshold, shrink, clip. `a` > 0. */
export function proximalOperator(g: Penalty, j: number, a: number, b: number): number {
  const shrunk = b > g.l1[j] ? b - g.l1[j] : b < -g.l1[j] ? b + g.l1[j] : 0;
  return Math.min(Math.max(shrunk / (a + g.l2[j]), g.lower[j]), g.upper[j]);
}

/** True where the bounds leave a coefficient one value. */
export const isFixed = (g: Penalty, j: number): boolean => g.lower[j] === g.upper[j];

/** z clipped to the bounds. */
export function clipToBounds(g: Penalty, z: Float64Array): Float64Array {
  return z.map((value, j) => Math.min(Math.max(value, g.lower[j]), g.upper[j]));
}

/**
 * κ: the least-norm element of ∇f(z) + ∂g(z) (Boyd and Vandenberghe 2004, §5.5.3 for the conditions it measures).
 * Zero exactly at an optimum.
 */
export function leastSubgradient(g: Penalty, z: Float64Array, gradient: Float64Array): Float64Array {
  return gradient.map((slope, j) => {
    if (isFixed(g, j)) return 0;
    const smooth = slope + g.l2[j] * z[j];
    const kinked =
      z[j] !== 0
        ? smooth + g.l1[j] * Math.sign(z[j])
        : Math.sign(smooth) * Math.max(Math.abs(smooth) - g.l1[j], 0);
    if (z[j] <= g.lower[j]) return Math.min(kinked, 0);
    if (z[j] >= g.upper[j]) return Math.max(kinked, 0);
    return kinked;
  });
}
