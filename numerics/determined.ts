import { maxAbs } from './vector.js';

/** Whether rows determine coefficients: dependent columns, and columns along which a loss has no minimiser. */

/** A pivot this small, relative to its column, is rounding: the column is a combination of those before it. */
const PIVOT_LEAST = 1e-11;
/** A step that still moves a coefficient (of a column with unit spread) by this much, where curvature has all but gone. */
const STEP_LEAST = 0.02;
const CURVATURE_SHARE = 0.01;

/**
 * Which of `candidates` (ascending) are linear combinations of earlier ones, by the pivots of a Cholesky factorisation of
 * a Gram or curvature matrix (row-major p × p) in the scale of its diagonal.
 */
export function dependentColumns(matrix: Float64Array, p: number, candidates: readonly number[]): number[] {
  const dependent: number[] = [];
  const rows: { readonly column: number; readonly entries: number[] }[] = [];
  for (const j of candidates) {
    const size = matrix[j * p + j];
    const entries: number[] = [];
    let pivot = size;
    for (const [k, row] of rows.entries()) {
      let sum = matrix[j * p + row.column];
      for (let m = 0; m < k; m++) sum -= entries[m] * row.entries[m];
      const entry = sum / row.entries[k];
      entries.push(entry);
      pivot -= entry * entry;
    }
    if (!(pivot > PIVOT_LEAST * size)) {
      dependent.push(j);
      continue;
    }
    entries.push(Math.sqrt(pivot));
    rows.push({ column: j, entries });
  }
  return dependent;
}

/**
 * Columns along which a smooth loss has no minimiser: at a point whose gap is certified small, the Newton step is still
 * large, and `bend` = ΔᵀHΔ, the curvature along it, a small share of what it was at the start (separable classes, a
 * level without events: Albert and Anderson 1984). Empty where the optimum exists.
 */
export function runawayColumns(step: Float64Array, bend: number, startDiagonal: Float64Array): number[] {
  const longest = maxAbs(step);
  if (longest < STEP_LEAST) return [];
  let before = 0;
  for (let j = 0; j < step.length; j++) before += startDiagonal[j] * step[j] * step[j];
  if (bend > CURVATURE_SHARE * before) return [];
  return [...step.keys()].filter((j) => Math.abs(step[j]) >= 0.5 * longest);
}
