import { laneSum, madd, NUMBER, VECTOR, zeros } from './vectors';

/** Numbers from one packed column to the next: blocks of 256 rows, and 8 more so that columns do not share cache sets. */
export const PACKED_STRIDE: usize = 264;

/**
 * packed[j][r] ← √weights[r] · x_rj for a block of at most 256 rows; `weights` 0 for none. An odd last row is followed by
 * zeros, and so are the columns up to `padded`.
 */
export function packRows(x: usize, p: i32, rows: i32, weights: usize, packed: usize, padded: i32): void {
  const stride = <usize>p * NUMBER;
  const column = PACKED_STRIDE * NUMBER;
  for (let r = 0; r < rows; r += 2, x += 2 * stride) {
    const both = r + 1 < rows;
    let w0 = f64x2.splat(1);
    let w1 = f64x2.splat(both ? 1 : 0);
    if (weights != 0) {
      w0 = f64x2.sqrt(v128.load64_splat(weights));
      if (both) w1 = f64x2.sqrt(v128.load64_splat(weights, 8));
      weights += VECTOR;
    }
    let from = x;
    let next = both ? x + stride : x;
    let to = packed + (<usize>r << 3);
    const end = x + stride;
    for (; from + VECTOR <= end; from += VECTOR, next += VECTOR, to += 2 * column) {
      const a = f64x2.mul(v128.load(from), w0);
      const b = both ? f64x2.mul(v128.load(next), w1) : zeros();
      v128.store(to, v128.shuffle<f64>(a, b, 0, 2));
      v128.store(to + column, v128.shuffle<f64>(a, b, 1, 3));
    }
    if (from < end) {
      const a = f64x2.mul(v128.load64_splat(from), w0);
      const b = both ? f64x2.mul(v128.load64_splat(next), w1) : zeros();
      v128.store(to, v128.shuffle<f64>(a, b, 0, 2));
      to += column;
    }
    for (let j = p; j < padded; j++, to += column) v128.store(to, zeros());
  }
}

/** Tiles of the lower triangle of sums (row-major, padded × padded) += packed · packedᵀ; `padded` a multiple of 4. */
export function addGram(packed: usize, padded: i32, rows: i32, sums: usize): void {
  const column = PACKED_STRIDE * NUMBER;
  const bytes = <usize>((rows + 1) >> 1) * VECTOR;
  const line = <usize>padded * NUMBER;
  for (let j: usize = 0; j < <usize>padded; j += 4) {
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
  addToRow(to, 1, s00, s01, s02, s03);
  addToRow(to + line, 1, s10, s11, s12, s13);
}

/** to[i][j] += sign · a_i · b_j, i < 2, j < 4: rows `stride` bytes apart, of `bytes` each, a multiple of 16. */
export function addTile(a: usize, b: usize, stride: usize, bytes: usize, to: usize, sign: f64): void {
  let a1 = a + stride;
  let b1 = b + stride;
  let b2 = b1 + stride;
  let b3 = b2 + stride;
  let s00 = zeros();
  let s01 = zeros();
  let s02 = zeros();
  let s03 = zeros();
  let s10 = zeros();
  let s11 = zeros();
  let s12 = zeros();
  let s13 = zeros();
  for (const end = a + bytes; a < end; a += VECTOR) {
    const u0 = v128.load(a);
    const u1 = v128.load(a1);
    let v = v128.load(b);
    s00 = madd(u0, v, s00);
    s10 = madd(u1, v, s10);
    v = v128.load(b1);
    s01 = madd(u0, v, s01);
    s11 = madd(u1, v, s11);
    v = v128.load(b2);
    s02 = madd(u0, v, s02);
    s12 = madd(u1, v, s12);
    v = v128.load(b3);
    s03 = madd(u0, v, s03);
    s13 = madd(u1, v, s13);
    a1 += VECTOR;
    b += VECTOR;
    b1 += VECTOR;
    b2 += VECTOR;
    b3 += VECTOR;
  }
  addToRow(to, sign, s00, s01, s02, s03);
  addToRow(to + stride, sign, s10, s11, s12, s13);
}

@inline
function addToRow(to: usize, sign: f64, s0: v128, s1: v128, s2: v128, s3: v128): void {
  f64.store(to, f64.load(to) + sign * laneSum(s0));
  f64.store(to, f64.load(to, 8) + sign * laneSum(s1), 8);
  f64.store(to, f64.load(to, 16) + sign * laneSum(s2), 16);
  f64.store(to, f64.load(to, 24) + sign * laneSum(s3), 24);
}
