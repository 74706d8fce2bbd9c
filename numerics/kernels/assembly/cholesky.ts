import { madd, nmadd, NUMBER, VECTOR, zeros } from './vectors';

/**
 * A matrix in panels of four rows, each column by column: entry (i, k) is number 4 k + i mod 4 of panel ⌊i / 4⌋, and a panel
 * has 4 · order numbers. Two addresses are then enough for a tile of 4 × 4, and nothing is summed across lanes.
 */
const PANEL: i32 = 4;
/** From one column of a panel to the next. */
const COLUMN: usize = 32;
/** Columns made at a time: what was made before them is read once for all of them. */
const BLOCK: i32 = 32;

/**
 * The lower triangle of a (in panels, order a multiple of 4) becomes its Cholesky factor, block of columns by block of
 * columns (left-looking; Golub and Van Loan, §4.2). 0 where a pivot is not positive and finite, else 1.
 */
export function cholesky(a: usize, order: i32): i32 {
  const panel = <usize>(PANEL * order) * NUMBER;
  for (let first = 0; first < order; first += BLOCK) {
    const end = min(first + BLOCK, order);
    for (let i = first; i < order; i += PANEL) {
      for (let j = first; j < end && j <= i; j += PANEL) takeOff(at(a, panel, i), at(a, panel, j), 0, first, j);
    }
    for (let j = first; j < end; j += PANEL) {
      const pivots = at(a, panel, j);
      takeOff(pivots, pivots, first, j, j);
      if (!finishPivots(pivots + <usize>j * COLUMN)) return 0;
      for (let i = j + PANEL; i < order; i += PANEL) {
        const rows = at(a, panel, i);
        takeOff(rows, pivots, first, j, j);
        finishRows(rows + <usize>j * COLUMN, pivots + <usize>j * COLUMN);
      }
    }
  }
  return 1;
}

@inline
function at(a: usize, panel: usize, row: i32): usize {
  return a + <usize>(row >> 2) * panel;
}

/** Columns j … j + 3 of panel `rows` −= Σ over columns from … to − 1 of its own times those of panel `pivots`. */
function takeOff(rows: usize, pivots: usize, from: i32, to: i32, j: i32): void {
  let s00 = zeros();
  let s01 = zeros();
  let s10 = zeros();
  let s11 = zeros();
  let s20 = zeros();
  let s21 = zeros();
  let s30 = zeros();
  let s31 = zeros();
  const end = rows + <usize>to * COLUMN;
  let b = pivots + <usize>from * COLUMN;
  for (let a = rows + <usize>from * COLUMN; a < end; a += COLUMN, b += COLUMN) {
    const u0 = v128.load(a);
    const u1 = v128.load(a, 16);
    let v = v128.load64_splat(b);
    s00 = madd(u0, v, s00);
    s01 = madd(u1, v, s01);
    v = v128.load64_splat(b, 8);
    s10 = madd(u0, v, s10);
    s11 = madd(u1, v, s11);
    v = v128.load64_splat(b, 16);
    s20 = madd(u0, v, s20);
    s21 = madd(u1, v, s21);
    v = v128.load64_splat(b, 24);
    s30 = madd(u0, v, s30);
    s31 = madd(u1, v, s31);
  }
  const out = rows + <usize>j * COLUMN;
  v128.store(out, f64x2.sub(v128.load(out), s00));
  v128.store(out, f64x2.sub(v128.load(out, 16), s01), 16);
  v128.store(out, f64x2.sub(v128.load(out, 32), s10), 32);
  v128.store(out, f64x2.sub(v128.load(out, 48), s11), 48);
  v128.store(out, f64x2.sub(v128.load(out, 64), s20), 64);
  v128.store(out, f64x2.sub(v128.load(out, 80), s21), 80);
  v128.store(out, f64x2.sub(v128.load(out, 96), s30), 96);
  v128.store(out, f64x2.sub(v128.load(out, 112), s31), 112);
}

/** The factor of a 4 × 4 tile on the diagonal; false where a pivot is not positive and finite. */
function finishPivots(tile: usize): bool {
  for (let k = 0; k < PANEL; k++) {
    for (let i = k; i < PANEL; i++) {
      const own = entry(tile, i, k);
      let sum = f64.load(own);
      for (let l = 0; l < k; l++) sum -= f64.load(entry(tile, i, l)) * f64.load(entry(tile, k, l));
      if (i > k) sum /= f64.load(entry(tile, k, k));
      else if (sum > 0 && sum < Infinity) sum = sqrt(sum);
      else return false;
      f64.store(own, sum);
    }
  }
  return true;
}

@inline
function entry(tile: usize, i: i32, k: i32): usize {
  return tile + <usize>(PANEL * k + i) * NUMBER;
}

/** A tile below: forward substitution of its four rows through the tile on the diagonal. */
function finishRows(rows: usize, pivots: usize): void {
  for (let k = 0; k < PANEL; k++) {
    const own = rows + <usize>k * COLUMN;
    const pivot = v128.load64_splat(entry(pivots, k, k));
    let low = v128.load(own);
    let high = v128.load(own, 16);
    for (let l = 0; l < k; l++) {
      const v = v128.load64_splat(entry(pivots, k, l));
      low = nmadd(v128.load(rows + <usize>l * COLUMN), v, low);
      high = nmadd(v128.load(rows + <usize>l * COLUMN, 16), v, high);
    }
    v128.store(own, f64x2.div(low, pivot));
    v128.store(own, f64x2.div(high, pivot), 16);
  }
}

/** b ← x with L Lᵀ x = b; L in panels, b of `order` numbers. */
export function solve(l: usize, order: i32, b: usize): void {
  const panel = <usize>(PANEL * order) * NUMBER;
  for (let i = 0; i < order; i += PANEL) {
    const rows = at(l, panel, i);
    const own = b + <usize>i * NUMBER;
    let low = v128.load(own);
    let high = v128.load(own, 16);
    let from = rows;
    for (let k = b; k < own; k += NUMBER, from += COLUMN) {
      const v = v128.load64_splat(k);
      low = nmadd(v128.load(from), v, low);
      high = nmadd(v128.load(from, 16), v, high);
    }
    v128.store(own, low);
    v128.store(own, high, 16);
    for (let k = 0; k < PANEL; k++) {
      let sum = f64.load(own + <usize>k * NUMBER);
      for (let m = 0; m < k; m++) sum -= f64.load(entry(from, k, m)) * f64.load(own + <usize>m * NUMBER);
      f64.store(own + <usize>k * NUMBER, sum / f64.load(entry(from, k, k)));
    }
  }
  for (let i = order - PANEL; i >= 0; i -= PANEL) {
    const rows = at(l, panel, i);
    const own = b + <usize>i * NUMBER;
    const tile = rows + <usize>i * COLUMN;
    for (let k = PANEL - 1; k >= 0; k--) {
      let sum = f64.load(own + <usize>k * NUMBER);
      for (let m = k + 1; m < PANEL; m++) sum -= f64.load(entry(tile, m, k)) * f64.load(own + <usize>m * NUMBER);
      f64.store(own + <usize>k * NUMBER, sum / f64.load(entry(tile, k, k)));
    }
    const low = v128.load(own);
    const high = v128.load(own, 16);
    // two columns at a time: their sums fill one vector
    let from = rows;
    for (let k = b; k < own; k += VECTOR, from += 2 * COLUMN) {
      const s = madd(v128.load(from, 16), high, f64x2.mul(v128.load(from), low));
      const t = madd(v128.load(from, 48), high, f64x2.mul(v128.load(from, 32), low));
      const sums = f64x2.add(v128.shuffle<f64>(s, t, 0, 2), v128.shuffle<f64>(s, t, 1, 3));
      v128.store(k, f64x2.sub(v128.load(k), sums));
    }
  }
}
