import type { SparseColumns } from './sparse-columns.js';

/** The rows of a sum, by their numbers. */
type RowNumbers = Int32Array;

/**
 * factor · Σ_r weights[r] x_r x_rᵀ over `rows`, p × p. With Z the entries and s the shift,
 * XᵀWX = ZᵀWZ − s (ZᵀW1)ᵀ − (ZᵀW1) sᵀ + (1ᵀW1) s sᵀ.
 */
export function sparseGram(
  { entries, shift, p }: SparseColumns,
  rows: RowNumbers,
  weights: Float64Array | null,
  factor: number,
): Float64Array {
  const { starts, columns, values } = entries;
  const out = new Float64Array(p * p);
  const sums = new Float64Array(p);
  let total = 0;
  rows.forEach((row, r) => {
    const weight = factor * (weights === null ? 1 : weights[r]);
    total += weight;
    const end = starts[row + 1];
    for (let e = starts[row]; e < end; e++) {
      const left = weight * values[e];
      const i = columns[e];
      sums[i] += left;
      for (let f = starts[row]; f <= e; f++) {
        const j = columns[f];
        out[i > j ? i * p + j : j * p + i] += left * values[f];
      }
    }
  });
  for (let i = 0; i < p; i++)
    for (let j = 0; j <= i; j++) {
      const value = out[i * p + j] - shift[i] * sums[j] - shift[j] * (sums[i] - total * shift[i]);
      out[i * p + j] = value;
      out[j * p + i] = value;
    }
  return out;
}

/** X D Xᵀ over `rows`, D = diag(inverse): one row spread out at a time, the others' entries looked up in it. */
export function sparseCrossProducts(
  { entries, shift, p }: SparseColumns,
  rows: RowNumbers,
  inverse: Float64Array,
): Float64Array {
  const { starts, columns, values } = entries;
  const n = rows.length;
  const out = new Float64Array(n * n);
  const spread = new Float64Array(p);
  const fixed = shift.map((s, j) => inverse[j] * s);
  const along = Float64Array.from(rows, (row) => {
    let sum = 0;
    for (let e = starts[row]; e < starts[row + 1]; e++) sum += values[e] * fixed[columns[e]];
    return sum;
  });
  let both = 0;
  for (let j = 0; j < p; j++) both += fixed[j] * shift[j];
  rows.forEach((row, r) => {
    for (let e = starts[row]; e < starts[row + 1]; e++) spread[columns[e]] = inverse[columns[e]] * values[e];
    for (let s = 0; s <= r; s++) {
      const other = rows[s];
      let sum = 0;
      for (let e = starts[other]; e < starts[other + 1]; e++) sum += values[e] * spread[columns[e]];
      const value = sum - along[r] - along[s] + both;
      out[r * n + s] = value;
      out[s * n + r] = value;
    }
    for (let e = starts[row]; e < starts[row + 1]; e++) spread[columns[e]] = 0;
  });
  return out;
}
