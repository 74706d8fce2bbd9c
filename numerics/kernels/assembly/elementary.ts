import { madd, nmadd } from './vectors';

/** ln 2 in two parts: products of the first with whole numbers up to 2¹⁵ are exact. */
const LN2_HIGH: f64 = 0.6931471805582987;
const LN2_LOW: f64 = 1.6465949582897082e-12;
/** 1.5 · 2⁵²: added and taken away again it rounds to a whole number, which the low bits of the sum hold. */
const ROUNDER: f64 = 6755399441055744;

/**
 * Constants lie in memory: V8 makes a vector constant anew, in four instructions, wherever one stands in the code.
 * By place: 0, 1 limits of the argument (beyond, the result is 0 or ∞); 2 1 / ln 2; 3 `ROUNDER`; 4, 5 ln 2; 6 one; 7 ½;
 * 8 √2 − 1; 9 two; 12…23 1/2!, …, 1/13!; 24…33 2/3, 2/5, …, 2/21; 34 the sign bit.
 */
const CONSTANTS: usize = memory.data<f64>([
  -750, 750, 1.4426950408889634, ROUNDER, LN2_HIGH, LN2_LOW, 1, 0.5, 0.41421356237309503, 2,
  0, 0,
  1 / 2.0, 1 / 6.0, 1 / 24.0, 1 / 120.0, 1 / 720.0, 1 / 5040.0, 1 / 40320.0, 1 / 362880.0, 1 / 3628800.0,
  1 / 39916800.0, 1 / 479001600.0, 1 / 6227020800.0,
  2 / 3.0, 2 / 5.0, 2 / 7.0, 2 / 9.0, 2 / 11.0, 2 / 13.0, 2 / 15.0, 2 / 17.0, 2 / 19.0, 2 / 21.0,
  -0.0,
]);

@inline
function constant(place: usize): v128 {
  return v128.load64_splat(CONSTANTS + place * 8);
}

@inline
export function one(): v128 {
  return constant(6);
}

/** −|x|. */
@inline
export function negativeSize(x: v128): v128 {
  return v128.or(x, constant(34));
}

/**
 * e^x in both lanes, NaN for NaN: x = n ln 2 + r, |r| ≤ ½ ln 2, and the Taylor polynomial of e^r to r¹³ (Muller,
 * Elementary Functions, 2016, §11). Error under 1 ulp; 2 ulp where the result is subnormal.
 */
@inline
export function exp(argument: v128): v128 {
  // pmin and pmax are one instruction each, and give their first operand where that is NaN
  const x = f64x2.pmin(f64x2.pmax(argument, constant(0)), constant(1));
  const rounder = constant(3);
  const n = f64x2.sub(f64x2.add(f64x2.mul(x, constant(2)), rounder), rounder);
  const r = nmadd(n, constant(5), nmadd(n, constant(4), x));
  const r2 = f64x2.mul(r, r);
  const r4 = f64x2.mul(r2, r2);
  // (e^r − 1 − r) / r², its terms in pairs (Estrin)
  const c0 = madd(r, constant(13), constant(12));
  const c2 = madd(r, constant(15), constant(14));
  const c4 = madd(r, constant(17), constant(16));
  const c6 = madd(r, constant(19), constant(18));
  const c8 = madd(r, constant(21), constant(20));
  const c10 = madd(r, constant(23), constant(22));
  const low = madd(r2, c2, c0);
  const middle = madd(r2, c6, c4);
  const high = madd(r2, c10, c8);
  const tail = madd(r4, madd(r4, high, middle), low);
  const power = f64x2.add(constant(6), madd(r2, tail, r));
  // 2^n in two factors, so that neither leaves the range of a number
  const half = f64x2.sub(f64x2.add(f64x2.mul(n, constant(7)), rounder), rounder);
  return f64x2.mul(f64x2.mul(power, powerOfTwo(half)), powerOfTwo(f64x2.sub(n, half)));
}

@inline
function powerOfTwo(n: v128): v128 {
  const bits = i64x2.shl(f64x2.add(n, constant(3)), 52);
  // the bits of 1 are its exponent, the bias, alone
  return i64x2.add(bits, constant(6));
}

/**
 * ln(1 + e) in both lanes for 0 ≤ e ≤ 1, NaN for NaN: 2 atanh(s) with s = e / (2 + e), or for e > √2 − 1 ln 2 and
 * s = (e − 1) / (e + 3), so that |s| ≤ 0.1716 (Muller 2016, §11). Error under 2 ulp.
 */
@inline
export function log1p(e: v128): v128 {
  const large = f64x2.gt(e, constant(8));
  const numerator = f64x2.sub(e, v128.and(constant(6), large));
  const denominator = f64x2.add(e, f64x2.add(constant(9), v128.and(constant(6), large)));
  const s = f64x2.div(numerator, denominator);
  const z = f64x2.mul(s, s);
  const z2 = f64x2.mul(z, z);
  const z4 = f64x2.mul(z2, z2);
  // (2 atanh(s) − 2 s) / (s z)
  const c0 = madd(z, constant(25), constant(24));
  const c2 = madd(z, constant(27), constant(26));
  const c4 = madd(z, constant(29), constant(28));
  const c6 = madd(z, constant(31), constant(30));
  const c8 = madd(z, constant(33), constant(32));
  const low = madd(z2, c2, c0);
  const high = madd(z2, c6, c4);
  const tail = madd(z4, madd(z4, c8, high), low);
  const twice = f64x2.add(s, s);
  const rest = madd(f64x2.mul(s, z), tail, v128.and(constant(5), large));
  return f64x2.add(v128.and(constant(4), large), f64x2.add(twice, rest));
}

/**
 * ln(product + rest) in both lanes, for 1 ≤ product < 2¹⁰⁰⁰ and rest far smaller: ln(1 + e) keeps the digits of what a
 * product next to 1 has beyond it.
 */
@inline
export function logOfProduct(product: v128, rest: v128): v128 {
  const bits = i64x2.sub(product, constant(6));
  const n = i64x2.shr_u(bits, 52);
  const scale = powerOfTwo(f64x2.neg(f64x2.sub(v128.or(n, constant(3)), constant(3))));
  const e = f64x2.add(f64x2.sub(f64x2.mul(product, scale), constant(6)), f64x2.mul(rest, scale));
  const whole = f64x2.sub(v128.or(n, constant(3)), constant(3));
  return f64x2.add(f64x2.mul(whole, constant(4)), f64x2.add(log1p(e), f64x2.mul(whole, constant(5))));
}

/** out[k] ← e^in[k] and ln(1 + in[k]), k < count, an even count: what the tests compare. */
export function exponentials(values: usize, count: i32, out: usize): void {
  for (const end = values + (<usize>count << 3); values < end; values += 16, out += 16)
    v128.store(out, exp(v128.load(values)));
}

export function logarithms(values: usize, count: i32, out: usize): void {
  for (const end = values + (<usize>count << 3); values < end; values += 16, out += 16)
    v128.store(out, log1p(v128.load(values)));
}
