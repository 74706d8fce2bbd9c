import { PACKED_STRIDE } from './gram';
import { laneSum, madd, nmadd, NUMBER, VECTOR, zeros } from './vectors';

/** Columns whose largest entry is below this are taken as zero, as in numerics/triangular-factor.ts. */
const NEGLIGIBLE: f64 = 1e-280;

/**
 * triangle ← R of [triangle; block] by Householder reflections (Golub and Van Loan, §5.2): the packed upper triangle,
 * column by column, and a block packed by `packRows`, which is used up. numerics/triangular-factor.ts is the twin.
 */
export function foldIn(triangle: usize, columns: i32, block: usize, rows: i32): void {
  const bytes = <usize>((rows + 1) >> 1) * VECTOR;
  const stride = PACKED_STRIDE * NUMBER;
  for (let j = 0; j < columns; j++) {
    const own = block + <usize>j * stride;
    const diagonal = triangle + <usize>((j * (j + 1)) / 2 + j) * NUMBER;
    const alpha = f64.load(diagonal);
    const most = largest(own, bytes, abs(alpha));
    if (most < NEGLIGIBLE) continue;
    const length = most * sqrt(squares(own, bytes, 1 / most) + (alpha / most) * (alpha / most));
    // the sign of the head is chosen so that nothing cancels
    const head = alpha < 0 ? alpha - length : alpha + length;
    f64.store(diagonal, alpha < 0 ? length : -length);
    divide(own, bytes, head);
    reflect(triangle, columns, block, j, own, bytes, abs(head) / length);
  }
}

function largest(from: usize, bytes: usize, least: f64): f64 {
  let most = f64x2.splat(least);
  for (const end = from + bytes; from < end; from += VECTOR) most = f64x2.max(most, f64x2.abs(v128.load(from)));
  return max(f64x2.extract_lane(most, 0), f64x2.extract_lane(most, 1));
}

function squares(from: usize, bytes: usize, scale: f64): f64 {
  const s = f64x2.splat(scale);
  let sum = zeros();
  for (const end = from + bytes; from < end; from += VECTOR) {
    const v = f64x2.mul(v128.load(from), s);
    sum = madd(v, v, sum);
  }
  return laneSum(sum);
}

function divide(from: usize, bytes: usize, by: f64): void {
  const d = f64x2.splat(by);
  for (const end = from + bytes; from < end; from += VECTOR) v128.store(from, f64x2.div(v128.load(from), d));
}

/** Applies the reflector of column j to the columns after it, four at a time. */
function reflect(
  triangle: usize,
  columns: i32,
  block: usize,
  j: i32,
  own: usize,
  bytes: usize,
  scale: f64,
): void {
  const stride = PACKED_STRIDE * NUMBER;
  let k = j + 1;
  for (; k + 4 <= columns; k += 4) {
    const at0 = triangle + <usize>((k * (k + 1)) / 2 + j) * NUMBER;
    const at1 = at0 + <usize>(k + 1) * NUMBER;
    const at2 = at1 + <usize>(k + 2) * NUMBER;
    const at3 = at2 + <usize>(k + 3) * NUMBER;
    reflectFour(block + <usize>k * stride, own, bytes, scale, at0, at1, at2, at3);
  }
  for (; k < columns; k++) {
    const at = triangle + <usize>((k * (k + 1)) / 2 + j) * NUMBER;
    reflectOne(block + <usize>k * stride, own, bytes, scale, at);
  }
}

/** Four packed columns; their distance stands in the instructions. */
function reflectFour(
  column: usize,
  own: usize,
  bytes: usize,
  scale: f64,
  at0: usize,
  at1: usize,
  at2: usize,
  at3: usize,
): void {
  let s0 = zeros();
  let s1 = zeros();
  let s2 = zeros();
  let s3 = zeros();
  const end = own + bytes;
  let to = column;
  for (let v = own; v < end; v += VECTOR, to += VECTOR) {
    const u = v128.load(v);
    s0 = madd(u, v128.load(to), s0);
    s1 = madd(u, v128.load(to, 2112), s1);
    s2 = madd(u, v128.load(to, 4224), s2);
    s3 = madd(u, v128.load(to, 6336), s3);
  }
  s0 = f64x2.splat(stepOf(at0, s0, scale));
  s1 = f64x2.splat(stepOf(at1, s1, scale));
  s2 = f64x2.splat(stepOf(at2, s2, scale));
  s3 = f64x2.splat(stepOf(at3, s3, scale));
  to = column;
  for (let v = own; v < end; v += VECTOR, to += VECTOR) {
    const u = v128.load(v);
    v128.store(to, nmadd(u, s0, v128.load(to)));
    v128.store(to, nmadd(u, s1, v128.load(to, 2112)), 2112);
    v128.store(to, nmadd(u, s2, v128.load(to, 4224)), 4224);
    v128.store(to, nmadd(u, s3, v128.load(to, 6336)), 6336);
  }
}

function reflectOne(column: usize, own: usize, bytes: usize, scale: f64, at: usize): void {
  let sum = zeros();
  for (let k: usize = 0; k < bytes; k += VECTOR) sum = madd(v128.load(own + k), v128.load(column + k), sum);
  const step = f64x2.splat(stepOf(at, sum, scale));
  for (let k: usize = 0; k < bytes; k += VECTOR)
    v128.store(column + k, nmadd(v128.load(own + k), step, v128.load(column + k)));
}

/** Takes the step off the triangle's entry and returns it. */
@inline
function stepOf(at: usize, sum: v128, scale: f64): f64 {
  const head = f64.load(at);
  const step = (head + laneSum(sum)) * scale;
  f64.store(at, head - step);
  return step;
}
