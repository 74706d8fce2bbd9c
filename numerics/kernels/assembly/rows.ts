import { laneSum, madd, NUMBER, VECTOR, zeros } from './vectors';

/**
 * Rows that come from memory are read one after the other, as one stream: several rows side by side halve the rate,
 * because the prefetcher has to begin anew with every row of every stream. Rows that are in the cache anyway are added
 * four at a time, which saves loads and stores of the sum.
 */

/** out[r] ← x_r · theta for the rows of a row-major matrix of p columns. */
export function rowProducts(x: usize, p: i32, rows: i32, theta: usize, out: usize): void {
  const stride = <usize>p * NUMBER;
  const last = out + <usize>rows * NUMBER;
  for (; out < last; out += NUMBER, x += stride) f64.store(out, dot(x, theta, p));
}

/** Σ a_j b_j. */
export function dot(a: usize, b: usize, count: i32): f64 {
  const end = a + <usize>count * NUMBER;
  let s = zeros();
  let t = zeros();
  let u = zeros();
  let v = zeros();
  for (; a + 4 * VECTOR <= end; a += 4 * VECTOR, b += 4 * VECTOR) {
    s = madd(v128.load(a), v128.load(b), s);
    t = madd(v128.load(a, 16), v128.load(b, 16), t);
    u = madd(v128.load(a, 32), v128.load(b, 32), u);
    v = madd(v128.load(a, 48), v128.load(b, 48), v);
  }
  for (; a + VECTOR <= end; a += VECTOR, b += VECTOR) s = madd(v128.load(a), v128.load(b), s);
  let sum = laneSum(f64x2.add(f64x2.add(s, t), f64x2.add(u, v)));
  for (; a < end; a += NUMBER, b += NUMBER) sum += f64.load(a) * f64.load(b);
  return sum;
}

/** out += Σ_r weights[r] · x_r. */
export function addWeightedRows(x: usize, p: i32, rows: i32, weights: usize, out: usize): void {
  const stride = <usize>p * NUMBER;
  const last = weights + <usize>rows * NUMBER;
  for (; weights < last; weights += NUMBER, x += stride) addScaled(x, f64.load(weights), p, out);
}

/** The same as `addWeightedRows` for rows that were just read. */
export function addCachedRows(x: usize, p: i32, rows: i32, weights: usize, out: usize): void {
  const stride = <usize>p * NUMBER;
  const last = weights + <usize>rows * NUMBER;
  for (; weights + 4 * NUMBER <= last; weights += 4 * NUMBER, x += 4 * stride) addFour(x, stride, weights, out);
  for (; weights < last; weights += NUMBER, x += stride) addScaled(x, f64.load(weights), p, out);
}

function addFour(x: usize, stride: usize, weights: usize, out: usize): void {
  let row0 = x;
  let row1 = x + stride;
  let row2 = row1 + stride;
  let row3 = row2 + stride;
  const w0 = v128.load64_splat(weights);
  const w1 = v128.load64_splat(weights, 8);
  const w2 = v128.load64_splat(weights, 16);
  const w3 = v128.load64_splat(weights, 24);
  const end = out + stride;
  for (; out + 2 * VECTOR <= end; out += 2 * VECTOR) {
    let s = v128.load(out);
    let t = v128.load(out, 16);
    s = madd(v128.load(row0), w0, s);
    t = madd(v128.load(row0, 16), w0, t);
    s = madd(v128.load(row1), w1, s);
    t = madd(v128.load(row1, 16), w1, t);
    s = madd(v128.load(row2), w2, s);
    t = madd(v128.load(row2, 16), w2, t);
    s = madd(v128.load(row3), w3, s);
    t = madd(v128.load(row3, 16), w3, t);
    v128.store(out, s);
    v128.store(out, t, 16);
    row0 += 2 * VECTOR;
    row1 += 2 * VECTOR;
    row2 += 2 * VECTOR;
    row3 += 2 * VECTOR;
  }
  for (; out < end; out += NUMBER) {
    let s = f64.load(out);
    s += f64.load(row0) * f64x2.extract_lane(w0, 0);
    s += f64.load(row1) * f64x2.extract_lane(w1, 0);
    s += f64.load(row2) * f64x2.extract_lane(w2, 0);
    s += f64.load(row3) * f64x2.extract_lane(w3, 0);
    f64.store(out, s);
    row0 += NUMBER;
    row1 += NUMBER;
    row2 += NUMBER;
    row3 += NUMBER;
  }
}

/** out += scale · a. */
export function addScaled(a: usize, scale: f64, count: i32, out: usize): void {
  const s = f64x2.splat(scale);
  const end = out + <usize>count * NUMBER;
  for (; out + 4 * VECTOR <= end; out += 4 * VECTOR, a += 4 * VECTOR) {
    v128.store(out, madd(v128.load(a), s, v128.load(out)));
    v128.store(out, madd(v128.load(a, 16), s, v128.load(out, 16)), 16);
    v128.store(out, madd(v128.load(a, 32), s, v128.load(out, 32)), 32);
    v128.store(out, madd(v128.load(a, 48), s, v128.load(out, 48)), 48);
  }
  for (; out + VECTOR <= end; out += VECTOR, a += VECTOR)
    v128.store(out, madd(v128.load(a), s, v128.load(out)));
  if (out < end) f64.store(out, f64.load(out) + scale * f64.load(a));
}

/** out += Σ_r weights[r] · x_r ∘ x_r (element by element). */
export function addWeightedSquares(x: usize, p: i32, rows: i32, weights: usize, out: usize): void {
  const last = weights + <usize>rows * NUMBER;
  const end = out + <usize>p * NUMBER;
  for (; weights < last; weights += NUMBER) {
    const weight = f64.load(weights);
    const w = f64x2.splat(weight);
    let to = out;
    for (; to + VECTOR <= end; to += VECTOR, x += VECTOR) {
      const v = v128.load(x);
      v128.store(to, madd(f64x2.mul(v, w), v, v128.load(to)));
    }
    if (to < end) {
      const v = f64.load(x);
      f64.store(to, f64.load(to) + weight * v * v);
      x += NUMBER;
    }
  }
}
