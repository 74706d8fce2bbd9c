import { addTile } from './gram';
import { addScaled, dot } from './rows';
import { NUMBER } from './vectors';

/** Columns made at a time: one tile wide. */
const BLOCK: i32 = 4;

/**
 * The lower triangle of a (row-major, order × order, order a multiple of 4) becomes its Cholesky factor, block of columns
 * by block of columns (left-looking; Golub and Van Loan, §4.2). 0 where a pivot is not positive and finite, else 1.
 */
export function cholesky(a: usize, order: i32): i32 {
  const line = <usize>order * NUMBER;
  for (let j = 0; j < order; j += BLOCK) {
    const pivots = a + <usize>j * line;
    const bytes = <usize>j * NUMBER;
    for (let i = j; i < order; i += 2) {
      const rows = a + <usize>i * line;
      addTile(rows, pivots, line, bytes, rows + bytes, -1);
    }
    for (let i = j; i < order; i++) {
      if (!finishRow(a + <usize>i * line + bytes, pivots + bytes, line, i - j)) return 0;
    }
  }
  return 1;
}

/** Forward substitution of one row through the block's own triangle; row `place` of the block itself gets its pivot. */
function finishRow(row: usize, block: usize, line: usize, place: i32): bool {
  const columns = min(place, BLOCK);
  for (let k = 0; k < columns; k++) {
    const other = block + <usize>k * line;
    let sum = f64.load(row + (<usize>k << 3));
    for (let l = 0; l < k; l++) sum -= f64.load(row + (<usize>l << 3)) * f64.load(other + (<usize>l << 3));
    f64.store(row + (<usize>k << 3), sum / f64.load(other + (<usize>k << 3)));
  }
  if (place >= BLOCK) return true;
  const own = row + (<usize>place << 3);
  let pivot = f64.load(own);
  for (let l = 0; l < place; l++) {
    const value = f64.load(row + (<usize>l << 3));
    pivot -= value * value;
  }
  f64.store(own, sqrt(pivot));
  return pivot > 0 && pivot < Infinity;
}

/** b ← x with L Lᵀ x = b. */
export function solve(l: usize, order: i32, p: i32, b: usize): void {
  const line = <usize>order * NUMBER;
  for (let i = 0; i < p; i++) {
    const row = l + <usize>i * line;
    const at = b + (<usize>i << 3);
    f64.store(at, (f64.load(at) - dot(row, b, i)) / f64.load(row + (<usize>i << 3)));
  }
  for (let i = p - 1; i >= 0; i--) {
    const row = l + <usize>i * line;
    const at = b + (<usize>i << 3);
    const value = f64.load(at) / f64.load(row + (<usize>i << 3));
    f64.store(at, value);
    addScaled(row, -value, i, b);
  }
}
