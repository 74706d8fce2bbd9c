/** Bytes of a number, and of a vector of two. */
export const NUMBER: usize = 8;
export const VECTOR: usize = 16;

/** a · b + c; with relaxed SIMD in one step where the processor can, rounded once instead of twice. */
@inline
export function madd(a: v128, b: v128, c: v128): v128 {
  if (ASC_FEATURE_RELAXED_SIMD) return f64x2.relaxed_madd(a, b, c);
  return f64x2.add(f64x2.mul(a, b), c);
}

/** c − a · b. */
@inline
export function nmadd(a: v128, b: v128, c: v128): v128 {
  if (ASC_FEATURE_RELAXED_SIMD) return f64x2.relaxed_nmadd(a, b, c);
  return f64x2.sub(c, f64x2.mul(a, b));
}

/** The first lane plus the second. */
@inline
export function laneSum(a: v128): f64 {
  return f64x2.extract_lane(a, 0) + f64x2.extract_lane(a, 1);
}

@inline
export function zeros(): v128 {
  return f64x2.splat(0);
}

/** Numbers of two rows, or of a single last one twice. */
@inline
export function loadRows(at: usize, single: bool): v128 {
  return single ? v128.load64_splat(at) : v128.load(at);
}
