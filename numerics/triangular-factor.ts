/**
 * Triangular factor R of a QR factorisation by Householder reflections (Golub and Van Loan, Matrix Computations, §5.2),
 * taken over blocks of rows one after the other (TSQR: Demmel, Grigori, Hoemmen, Langou 2012), so that memory stays
 * bounded and the condition of the rows is never squared. The diagonal of R is not negative, which makes it unique
 * where the columns are independent.
 *
 * Packed upper triangle, column by column: (i ≤ j, j) at j (j + 1) / 2 + i.
 */

/** Rows that one step folds in: 256 rows of a hundred columns stay in the second-level cache. */
export const FACTOR_BLOCK_ROWS = 256;

/**
 * Columns whose largest entry is below this are taken as zero: squares of what is left of dependent columns would lose
 * their digits to underflow.
 */
const NEGLIGIBLE = 1e-280;

export interface FactorAccumulator {
  /** Folds in `rowCount` (at most FACTOR_BLOCK_ROWS) row-major rows; they are copied, not changed. */
  append(rows: Float64Array, rowCount: number): void;
  /** The packed triangle of all rows appended so far. */
  packed(): Float64Array;
}

export function factorAccumulator(columns: number): FactorAccumulator {
  const triangle = new Float64Array((columns * (columns + 1)) / 2);
  const block = new Float64Array(FACTOR_BLOCK_ROWS * columns);
  return {
    append(rows, rowCount) {
      if (rowCount > FACTOR_BLOCK_ROWS) throw new RangeError(`${rowCount} rows in one block`);
      for (let r = 0; r < rowCount; r++) {
        for (let j = 0; j < columns; j++) block[j * rowCount + r] = rows[r * columns + j];
      }
      foldIn(triangle, columns, block, rowCount, () => rowCount);
    },
    packed: () => withPositiveDiagonal(triangle, columns),
  };
}

/** Packed R of `rows` (row-major, rowCount × columns): RᵀR = rowsᵀ rows. */
export function triangularFactor(rows: Float64Array, rowCount: number, columns: number): Float64Array {
  const accumulator = factorAccumulator(columns);
  for (let from = 0; from < rowCount; from += FACTOR_BLOCK_ROWS) {
    const to = Math.min(from + FACTOR_BLOCK_ROWS, rowCount);
    accumulator.append(rows.subarray(from * columns, to * columns), to - from);
  }
  return accumulator.packed();
}

/** Packed R of the triangles stacked in the order given: RᵀR = Σ R_iᵀ R_i. */
export function mergeFactors(factors: readonly Float64Array[], columns: number): Float64Array {
  const triangle = new Float64Array((columns * (columns + 1)) / 2);
  const block = new Float64Array(columns * columns);
  for (const factor of factors) {
    block.fill(0);
    for (let j = 0, at = 0; j < columns; j++) {
      for (let i = 0; i <= j; i++, at++) block[j * columns + i] = factor[at];
    }
    foldIn(triangle, columns, block, columns, (j) => j + 1);
  }
  return withPositiveDiagonal(triangle, columns);
}

/**
 * triangle ← R of [triangle; block]. The block is column-major with column stride `stride` and is used up; only the
 * first filled(j) entries of its column j may differ from zero, and filled never falls with j.
 */
function foldIn(
  triangle: Float64Array,
  columns: number,
  block: Float64Array,
  stride: number,
  filled: (column: number) => number,
): void {
  for (let j = 0; j < columns; j++) {
    const rows = filled(j);
    const own = j * stride;
    const diagonal = (j * (j + 1)) / 2 + j;
    const alpha = triangle[diagonal];
    let most = Math.abs(alpha);
    for (let r = 0; r < rows; r++) most = Math.max(most, Math.abs(block[own + r]));
    if (most < NEGLIGIBLE) continue;
    let squares = (alpha / most) * (alpha / most);
    for (let r = 0; r < rows; r++) squares += (block[own + r] / most) * (block[own + r] / most);
    const length = most * Math.sqrt(squares);
    // the reflector is (1, block column / head), the sign of the head chosen so that nothing cancels
    const head = alpha < 0 ? alpha - length : alpha + length;
    triangle[diagonal] = alpha < 0 ? length : -length;
    for (let r = 0; r < rows; r++) block[own + r] /= head;
    reflectColumns(triangle, columns, block, stride, j, rows, Math.abs(head) / length);
  }
}

/** Applies the reflector of column j to the columns after it, four at a time. */
function reflectColumns(
  triangle: Float64Array,
  columns: number,
  block: Float64Array,
  stride: number,
  j: number,
  rows: number,
  scale: number,
): void {
  const own = j * stride;
  let k = j + 1;
  for (; k + 4 <= columns; k += 4) {
    const at0 = (k * (k + 1)) / 2 + j;
    const at1 = at0 + k + 1;
    const at2 = at1 + k + 2;
    const at3 = at2 + k + 3;
    const col0 = k * stride;
    const col1 = col0 + stride;
    const col2 = col1 + stride;
    const col3 = col2 + stride;
    let s0 = triangle[at0];
    let s1 = triangle[at1];
    let s2 = triangle[at2];
    let s3 = triangle[at3];
    for (let r = 0; r < rows; r++) {
      const v = block[own + r];
      s0 += v * block[col0 + r];
      s1 += v * block[col1 + r];
      s2 += v * block[col2 + r];
      s3 += v * block[col3 + r];
    }
    s0 *= scale;
    s1 *= scale;
    s2 *= scale;
    s3 *= scale;
    triangle[at0] -= s0;
    triangle[at1] -= s1;
    triangle[at2] -= s2;
    triangle[at3] -= s3;
    for (let r = 0; r < rows; r++) {
      const v = block[own + r];
      block[col0 + r] -= s0 * v;
      block[col1 + r] -= s1 * v;
      block[col2 + r] -= s2 * v;
      block[col3 + r] -= s3 * v;
    }
  }
  for (; k < columns; k++) {
    const at = (k * (k + 1)) / 2 + j;
    const column = k * stride;
    let sum = triangle[at];
    for (let r = 0; r < rows; r++) sum += block[own + r] * block[column + r];
    sum *= scale;
    triangle[at] -= sum;
    for (let r = 0; r < rows; r++) block[column + r] -= sum * block[own + r];
  }
}

/** A copy whose rows are turned so that the diagonal is not negative. */
export function withPositiveDiagonal(triangle: Float64Array, columns: number): Float64Array {
  const out = Float64Array.from(triangle);
  for (let i = 0; i < columns; i++) {
    if (!(triangle[(i * (i + 1)) / 2 + i] < 0)) continue;
    for (let j = i; j < columns; j++) out[(j * (j + 1)) / 2 + i] = -out[(j * (j + 1)) / 2 + i];
  }
  return out;
}
