/** Passes over blocks of rows of a row-major matrix with p columns, four rows at a time for speed. */

/** out[r − from] ← x_r · theta, for from ≤ r < to. */
export function rowProducts(
  x: Float64Array,
  p: number,
  from: number,
  to: number,
  theta: Float64Array,
  out: Float64Array,
): void {
  let r = from;
  for (; r + 4 <= to; r += 4) {
    const row0 = r * p;
    const row1 = row0 + p;
    const row2 = row1 + p;
    const row3 = row2 + p;
    let s0 = 0;
    let s1 = 0;
    let s2 = 0;
    let s3 = 0;
    for (let j = 0; j < p; j++) {
      const t = theta[j];
      s0 += x[row0 + j] * t;
      s1 += x[row1 + j] * t;
      s2 += x[row2 + j] * t;
      s3 += x[row3 + j] * t;
    }
    const at = r - from;
    out[at] = s0;
    out[at + 1] = s1;
    out[at + 2] = s2;
    out[at + 3] = s3;
  }
  for (; r < to; r++) {
    const row = r * p;
    let sum = 0;
    for (let j = 0; j < p; j++) sum += x[row + j] * theta[j];
    out[r - from] = sum;
  }
}

/** out += Σ_r weights[r − from] · x_r, for from ≤ r < to. */
export function addWeightedRows(
  x: Float64Array,
  p: number,
  from: number,
  to: number,
  weights: Float64Array,
  out: Float64Array,
): void {
  let r = from;
  for (; r + 4 <= to; r += 4) {
    const row0 = r * p;
    const row1 = row0 + p;
    const row2 = row1 + p;
    const row3 = row2 + p;
    const w0 = weights[r - from];
    const w1 = weights[r - from + 1];
    const w2 = weights[r - from + 2];
    const w3 = weights[r - from + 3];
    for (let j = 0; j < p; j++) {
      out[j] += w0 * x[row0 + j] + w1 * x[row1 + j] + (w2 * x[row2 + j] + w3 * x[row3 + j]);
    }
  }
  for (; r < to; r++) {
    const row = r * p;
    const w = weights[r - from];
    for (let j = 0; j < p; j++) out[j] += w * x[row + j];
  }
}

/** out += Σ_r weights[r − from] · x_r ∘ x_r (element by element), for from ≤ r < to. */
export function addWeightedSquares(
  x: Float64Array,
  p: number,
  from: number,
  to: number,
  weights: Float64Array,
  out: Float64Array,
): void {
  for (let r = from; r < to; r++) {
    const row = r * p;
    const w = weights[r - from];
    for (let j = 0; j < p; j++) out[j] += w * x[row + j] * x[row + j];
  }
}

/** The p × rowCount transpose of a row-major rowCount × p matrix. */
export function transposed(x: Float64Array, rowCount: number, p: number): Float64Array {
  const out = new Float64Array(rowCount * p);
  for (let r = 0; r < rowCount; r++) for (let j = 0; j < p; j++) out[j * rowCount + r] = x[r * p + j];
  return out;
}
