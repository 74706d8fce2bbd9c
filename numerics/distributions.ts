/**
 * Probabilities and quantiles of the normal, Student's t, χ² and F distributions, to about 1e-13 relative: from the
 * regularised incomplete gamma and beta functions (series and continued fractions: Abramowitz and Stegun 1964, §6.5 and
 * §26.5; Lentz 1976) and a polished normal quantile. All tails are computed as tails, never as one minus a body.
 */

const TERMS_MOST = 10_000;
const CLOSE = 1e-16;
const TINY = 1e-300;

/** ln Γ(x), x > 0 (Lanczos 1964, g = 7, nine coefficients). */
export function logGamma(x: number): number {
  if (x < 0.5) return Math.log(Math.PI / Math.sin(Math.PI * x)) - logGamma(1 - x);
  const y = x - 1;
  let sum = LANCZOS[0];
  for (let k = 1; k < LANCZOS.length; k++) sum += LANCZOS[k] / (y + k);
  const t = y + 7.5;
  return 0.5 * Math.log(2 * Math.PI) + (y + 0.5) * Math.log(t) - t + Math.log(sum);
}

const LANCZOS = [
  0.99999999999980993, 676.5203681218851, -1259.1392167224028, 771.32342877765313, -176.61502916214059,
  12.507343278686905, -0.13857109526572012, 9.9843695780195716e-6, 1.5056327351493116e-7,
];

/** From here on ln Γ is taken by Stirling's series, so that large values need not cancel. */
const LARGE = 10;

/** ln Γ(x) − ((x − ½) ln x − x + ½ ln 2π), x ≥ 10 (Stirling's series: Abramowitz and Stegun 1964, 6.1.41). */
function stirlingRest(x: number): number {
  const square = 1 / (x * x);
  const series = [1 / 12, -1 / 360, 1 / 1260, -1 / 1680, 1 / 1188, -691 / 360360, 1 / 156];
  return series.reduceRight((sum, term) => sum * square + term, 0) / x;
}

/** ln B(a, b), without the cancellation of large ln Γ (Didonato and Morris 1992). */
function logBeta(a: number, b: number): number {
  const big = Math.max(a, b);
  const small = Math.min(a, b);
  if (big < LARGE) return logGamma(a) + logGamma(b) - logGamma(a + b);
  const rest = stirlingRest(big) - stirlingRest(big + small);
  if (small < LARGE)
    return (
      logGamma(small) - (big - 0.5) * Math.log1p(small / big) - small * Math.log(big + small) + small + rest
    );
  return (
    0.5 * Math.log((2 * Math.PI) / small) -
    (big - 0.5) * Math.log1p(small / big) -
    small * Math.log1p(big / small) +
    stirlingRest(small) +
    rest
  );
}

/** Lower and upper regularised incomplete gamma functions P(a, x) and Q(a, x); a > 0, x ≥ 0. */
export function incompleteGamma(a: number, x: number): { readonly lower: number; readonly upper: number } {
  if (x === 0) return { lower: 0, upper: 1 };
  const front = Math.exp(
    a < LARGE
      ? a * Math.log(x) - x - logGamma(a)
      : a * (Math.log1p((x - a) / a) - (x - a) / a) + 0.5 * Math.log(a / (2 * Math.PI)) - stirlingRest(a),
  );
  if (x < a + 1) {
    let term = 1 / a;
    let sum = term;
    for (let k = 1; k < TERMS_MOST && Math.abs(term) > CLOSE * sum; k++) {
      term *= x / (a + k);
      sum += term;
    }
    return { lower: front * sum, upper: 1 - front * sum };
  }
  const upper =
    front *
    continuedFraction(
      (k) => (k === 0 ? 1 : k * (a - k)),
      (k) => x + 2 * k + 1 - a,
    );
  return { lower: 1 - upper, upper };
}

/** Regularised incomplete beta function I_x(a, b), given x and 1 − x. */
export function incompleteBeta(a: number, b: number, x: number, rest = 1 - x): number {
  if (x <= 0) return 0;
  if (rest <= 0) return 1;
  // the fraction converges fast on this side of the mean only
  if (x > (a + 1) / (a + b + 2)) return 1 - incompleteBeta(b, a, rest, x);
  const front = Math.exp(a * Math.log(x) + b * Math.log(rest) - logBeta(a, b) - Math.log(a));
  const numerator = (k: number): number => {
    if (k === 0) return 1;
    const m = Math.floor(k / 2);
    return k % 2 === 0
      ? (m * (b - m) * x) / ((a + 2 * m - 1) * (a + 2 * m))
      : (-(a + m) * (a + b + m) * x) / ((a + 2 * m) * (a + 2 * m + 1));
  };
  return front * continuedFraction(numerator, () => 1);
}

/** n₀ / (d₀ + n₁ / (d₁ + n₂ / (d₂ + …))) by the modified Lentz method. */
function continuedFraction(numerator: (k: number) => number, denominator: (k: number) => number): number {
  let value = TINY;
  let c = value;
  let d = 0;
  for (let k = 0; k < TERMS_MOST; k++) {
    const n = numerator(k);
    const b = denominator(k);
    d = 1 / (b + n * d || TINY);
    c = b + n / c || TINY;
    const factor = c * d;
    value *= factor;
    if (k > 0 && Math.abs(factor - 1) < CLOSE) break;
  }
  return value - TINY;
}

/** P(Z > z), standard normal. */
export function normalUpper(z: number): number {
  const half = 0.5 * incompleteGamma(0.5, 0.5 * z * z).upper;
  return z >= 0 ? half : 1 - half;
}

/** P(|Z| > |z|), standard normal. */
export const normalTwoSided = (z: number): number => incompleteGamma(0.5, 0.5 * z * z).upper;

/** z with P(Z > z) = upper, 0 < upper < 1. */
export const normalUpperQuantile = (upper: number): number => quantile(normalUpper, upper);

/** P(T > t), Student's t with ν degrees of freedom. */
export function studentUpper(t: number, degreesOfFreedom: number): number {
  const half = 0.5 * studentTwoSided(t, degreesOfFreedom);
  return t >= 0 ? half : 1 - half;
}

/** P(|T| > |t|). */
export function studentTwoSided(t: number, degreesOfFreedom: number): number {
  const square = t * t;
  const whole = degreesOfFreedom + square;
  return incompleteBeta(0.5 * degreesOfFreedom, 0.5, degreesOfFreedom / whole, square / whole);
}

/** t with P(T > t) = upper. */
export const studentUpperQuantile = (upper: number, degreesOfFreedom: number): number =>
  quantile((t) => studentUpper(t, degreesOfFreedom), upper);

/** P(χ² > x) with ν degrees of freedom. */
export const chiSquaredUpper = (x: number, degreesOfFreedom: number): number =>
  x <= 0 ? 1 : incompleteGamma(0.5 * degreesOfFreedom, 0.5 * x).upper;

/** P(F > x) with ν₁ and ν₂ degrees of freedom. */
export function fisherUpper(x: number, first: number, second: number): number {
  if (x <= 0) return 1;
  const whole = second + first * x;
  return incompleteBeta(0.5 * second, 0.5 * first, second / whole, (first * x) / whole);
}

/** The point at which a falling tail function takes a value: bracketed by doubling, then halved to the last bit. */
function quantile(tail: (x: number) => number, upper: number): number {
  if (!(upper > 0 && upper < 1)) throw new RangeError(`a tail probability between 0 and 1, not ${upper}`);
  if (upper > 0.5) return -quantile(tail, 1 - upper);
  let low = 0;
  let high = 1;
  while (tail(high) > upper && high < Number.MAX_VALUE / 2) {
    low = high;
    high *= 2;
  }
  for (let k = 0; k < 200; k++) {
    const middle = low + (high - low) / 2;
    if (middle <= low || middle >= high) break;
    if (tail(middle) > upper) low = middle;
    else high = middle;
  }
  return low + (high - low) / 2;
}
