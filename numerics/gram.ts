/** Rows packed at a time: 32 rows of a few hundred columns stay in the second-level cache. */
const BLOCK_ROWS = 32;

/**
 * Weighted Gram matrix A = factor · Σ_r weights[r] · x_r x_rᵀ, full symmetric, row-major, p × p.
 *
 * x is row-major, rowCount × p; weights are not negative; null means 1 for every row. Each block of rows is packed
 * column by column and multiplied in register tiles of 2 × 4; terms are added in row order whatever the tiling, so the
 * bits depend on the content alone.
 */
export function weightedGram(
  x: Float64Array,
  rowCount: number,
  p: number,
  weights: Float64Array | null,
  factor: number,
): Float64Array {
  const padded = (p + 3) & ~3;
  const sums = new Float64Array(padded * padded);
  const packed = new Float64Array(padded * BLOCK_ROWS);
  for (let from = 0; from < rowCount; from += BLOCK_ROWS) {
    const rows = Math.min(BLOCK_ROWS, rowCount - from);
    packRows(packed, x, p, from, rows, weights);
    addBlock(sums, padded, packed, rows);
  }
  const gram = new Float64Array(p * p);
  for (let i = 0; i < p; i++) {
    for (let j = 0; j <= i; j++) {
      const value = factor * sums[i * padded + j];
      gram[i * p + j] = value;
      gram[j * p + i] = value;
    }
  }
  return gram;
}

/** packed[j · BLOCK_ROWS + r] ← √weight_r · x_rj. */
function packRows(
  packed: Float64Array,
  x: Float64Array,
  p: number,
  from: number,
  rows: number,
  weights: Float64Array | null,
): void {
  for (let r = 0; r < rows; r++) {
    const root = weights === null ? 1 : Math.sqrt(weights[from + r]);
    const start = (from + r) * p;
    for (let j = 0, to = r; j < p; j++, to += BLOCK_ROWS) packed[to] = x[start + j] * root;
  }
}

/** Lower-triangle tiles of sums += packed · packedᵀ. */
function addBlock(sums: Float64Array, padded: number, packed: Float64Array, rows: number): void {
  for (let j = 0; j < padded; j += 4) {
    const right0 = j * BLOCK_ROWS;
    const right1 = right0 + BLOCK_ROWS;
    const right2 = right1 + BLOCK_ROWS;
    const right3 = right2 + BLOCK_ROWS;
    for (let i = j; i < padded; i += 2) {
      const left0 = i * BLOCK_ROWS;
      const left1 = left0 + BLOCK_ROWS;
      let s00 = 0;
      let s01 = 0;
      let s02 = 0;
      let s03 = 0;
      let s10 = 0;
      let s11 = 0;
      let s12 = 0;
      let s13 = 0;
      for (let r = 0; r < rows; r++) {
        const a0 = packed[left0 + r];
        const a1 = packed[left1 + r];
        const b0 = packed[right0 + r];
        const b1 = packed[right1 + r];
        const b2 = packed[right2 + r];
        const b3 = packed[right3 + r];
        s00 += a0 * b0;
        s01 += a0 * b1;
        s02 += a0 * b2;
        s03 += a0 * b3;
        s10 += a1 * b0;
        s11 += a1 * b1;
        s12 += a1 * b2;
        s13 += a1 * b3;
      }
      const at = i * padded + j;
      sums[at] += s00;
      sums[at + 1] += s01;
      sums[at + 2] += s02;
      sums[at + 3] += s03;
      sums[at + padded] += s10;
      sums[at + padded + 1] += s11;
      sums[at + padded + 2] += s12;
      sums[at + padded + 3] += s13;
    }
  }
}
