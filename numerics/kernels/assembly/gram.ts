import { laneSum, madd, NUMBER, VECTOR, zeros } from './vectors';

/** Numbers from one packed column to the next: blocks of 256 rows, and 8 more so that columns do not share cache sets. */
export const PACKED_STRIDE: usize = 264;

/**
 * packed[j][r] ← √weights[r] · x_rj for a block of at most 256 rows; `weights` 0 for none. An odd last row is followed by
 * zeros, and so are the columns up to `padded`.
 */
export function packRows(x: usize, p: i32, rows: i32, weights: usize, packed: usize, padded: i32): void {
  const stride = <usize>p * NUMBER;
  let r = 0;
  for (; r + 4 <= rows; r += 4, x += 4 * stride) {
    packFour(x, stride, weights, packed + <usize>r * NUMBER);
    if (weights != 0) weights += 4 * NUMBER;
  }
  for (; r < rows; r += 2, x += 2 * stride) {
    packTwo(x, stride, weights, r + 1 < rows, packed + <usize>r * NUMBER);
    if (weights != 0) weights += 2 * NUMBER;
  }
  const bytes = <usize>((rows + 1) >> 1) * VECTOR;
  for (let j = p; j < padded; j++) {
    const column = packed + <usize>j * (PACKED_STRIDE * NUMBER);
    for (let at: usize = 0; at < bytes; at += VECTOR) v128.store(column + at, zeros());
  }
}

@inline
function root(weights: usize, place: usize): v128 {
  return weights == 0 ? f64x2.splat(1) : f64x2.sqrt(v128.load64_splat(weights + place * NUMBER));
}

function packFour(x0: usize, stride: usize, weights: usize, to: usize): void {
  const w0 = root(weights, 0);
  const w1 = root(weights, 1);
  const w2 = root(weights, 2);
  const w3 = root(weights, 3);
  let x1 = x0 + stride;
  let x2 = x1 + stride;
  let x3 = x2 + stride;
  const end = x1;
  for (; x0 + VECTOR <= end; x0 += VECTOR) {
    const a = f64x2.mul(v128.load(x0), w0);
    const b = f64x2.mul(v128.load(x1), w1);
    const c = f64x2.mul(v128.load(x2), w2);
    const d = f64x2.mul(v128.load(x3), w3);
    v128.store(to, v128.shuffle<f64>(a, b, 0, 2));
    v128.store(to, v128.shuffle<f64>(c, d, 0, 2), 16);
    v128.store(to, v128.shuffle<f64>(a, b, 1, 3), 2112);
    v128.store(to, v128.shuffle<f64>(c, d, 1, 3), 2128);
    x1 += VECTOR;
    x2 += VECTOR;
    x3 += VECTOR;
    to += 2 * PACKED_STRIDE * NUMBER;
  }
  if (x0 == end) return;
  f64.store(to, f64.load(x0) * f64x2.extract_lane(w0, 0));
  f64.store(to, f64.load(x1) * f64x2.extract_lane(w1, 0), 8);
  f64.store(to, f64.load(x2) * f64x2.extract_lane(w2, 0), 16);
  f64.store(to, f64.load(x3) * f64x2.extract_lane(w3, 0), 24);
}

/** Two last rows, or one and zeros. */
function packTwo(x: usize, stride: usize, weights: usize, both: bool, to: usize): void {
  const w0 = f64x2.extract_lane(root(weights, 0), 0);
  const w1 = both ? f64x2.extract_lane(root(weights, 1), 0) : 0;
  const end = x + stride;
  for (; x < end; x += NUMBER, to += PACKED_STRIDE * NUMBER) {
    f64.store(to, f64.load(x) * w0);
    f64.store(to, both ? f64.load(x + stride) * w1 : 0, 8);
  }
}

/**
 * Tiles of the lower triangle of sums (row-major, padded × padded) += packed · packedᵀ, of the columns from `first` up to
 * `end`; these and `padded` are multiples of 4.
 */
export function addGram(packed: usize, padded: i32, rows: i32, sums: usize, first: i32, end: i32): void {
  const column = PACKED_STRIDE * NUMBER;
  const bytes = <usize>((rows + 1) >> 1) * VECTOR;
  const line = <usize>padded * NUMBER;
  for (let j: usize = <usize>first; j < <usize>end; j += 4) {
    for (let i: usize = j; i < <usize>padded; i += 2)
      addPackedTile(packed + i * column, packed + j * column, bytes, sums + i * line + j * NUMBER, line);
  }
}

/**
 * to[i][j] += a_i · b_j, i < 2, j < 4, of packed columns. Their distance stands in the instructions, so that two
 * addresses serve six columns; eight sums and their operands are what V8 holds in registers without spilling.
 */
function addPackedTile(a: usize, b: usize, bytes: usize, to: usize, line: usize): void {
  let s00 = zeros();
  let s01 = zeros();
  let s02 = zeros();
  let s03 = zeros();
  let s10 = zeros();
  let s11 = zeros();
  let s12 = zeros();
  let s13 = zeros();
  for (const end = a + bytes; a < end; a += VECTOR, b += VECTOR) {
    const u0 = v128.load(a);
    const u1 = v128.load(a, 2112);
    let v = v128.load(b);
    s00 = madd(u0, v, s00);
    s10 = madd(u1, v, s10);
    v = v128.load(b, 2112);
    s01 = madd(u0, v, s01);
    s11 = madd(u1, v, s11);
    v = v128.load(b, 4224);
    s02 = madd(u0, v, s02);
    s12 = madd(u1, v, s12);
    v = v128.load(b, 6336);
    s03 = madd(u0, v, s03);
    s13 = madd(u1, v, s13);
  }
  addToRow(to, s00, s01, s02, s03);
  addToRow(to + line, s10, s11, s12, s13);
}

@inline
function addToRow(to: usize, s0: v128, s1: v128, s2: v128, s3: v128): void {
  f64.store(to, f64.load(to) + laneSum(s0));
  f64.store(to, f64.load(to, 8) + laneSum(s1), 8);
  f64.store(to, f64.load(to, 16) + laneSum(s2), 16);
  f64.store(to, f64.load(to, 24) + laneSum(s3), 24);
}
