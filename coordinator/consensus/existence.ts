import type { Penalty } from '../../numerics/penalty.js';
import { maxAbs } from '../../numerics/vector.js';
import type { Certificate } from './method.js';
import type { ConsensusProblem } from './problem.js';

/** A pivot this small, relative to its column, is rounding: the column is a combination of those before it. */
const PIVOT_LEAST = 1e-11;
/** A step that still moves a coefficient (of a column with unit spread) by this much, where curvature has all but gone. */
const STEP_LEAST = 0.02;
const CURVATURE_SHARE = 0.01;
/** A relative gap this small is the optimum itself, to rounding. */
const EXACT = 1e-12;

/**
 * Columns without a penalty that are linear combinations of earlier ones without a penalty, by the pivots of a
 * Cholesky factorisation of the curvature (row-major p × p) in the scale of its diagonal: without them the optimum is
 * not unique.
 */
export function aliasedColumns(curvature: Float64Array, g: Penalty): number[] {
  const p = g.l1.length;
  const aliased: number[] = [];
  const rows: { readonly column: number; readonly entries: number[] }[] = [];
  for (let j = 0; j < p; j++) {
    if (g.l1[j] > 0 || g.l2[j] > 0) continue;
    const size = curvature[j * p + j];
    const entries: number[] = [];
    let pivot = size;
    for (const [k, row] of rows.entries()) {
      let sum = curvature[j * p + row.column];
      for (let m = 0; m < k; m++) sum -= entries[m] * row.entries[m];
      const entry = sum / row.entries[k];
      entries.push(entry);
      pivot -= entry * entry;
    }
    if (!(pivot > PIVOT_LEAST * size)) {
      aliased.push(j);
      continue;
    }
    entries.push(Math.sqrt(pivot));
    rows.push({ column: j, entries });
  }
  return aliased;
}

/** Why there is no optimum, or no unique one, and the columns it lies with. */
export interface Flaw {
  readonly reason: 'rank-deficient' | 'separable';
  readonly columns: readonly number[];
}

/** Rank as the first curvature measured shows it, anywhere; where curvature may vanish that shows nothing. */
export function flawFromTheStart(
  { penalty, curvatureMayVanish }: ConsensusProblem,
  curvature: Float64Array,
): Flaw | null {
  const columns = curvatureMayVanish ? [] : aliasedColumns(curvature, penalty);
  return columns.length === 0 ? null : { reason: 'rank-deficient', columns };
}

/**
 * What a certificate and the curvature at its point say: the point stands, it is no optimum or not the only one, or
 * the search goes on. Where curvature may vanish, the loss runs off nowhere, but is flat along whatever has no curvature
 * at the optimum itself; short of the optimum a singular curvature says nothing.
 */
export function verdict(
  problem: ConsensusProblem,
  certificate: Certificate,
  curvature: Float64Array,
  step: { readonly direction: Float64Array; readonly bend: number },
  startDiagonal: Float64Array,
): 'stands' | 'goes on' | Flaw {
  // what is not a number certifies nothing
  if (!(certificate.relativeGap <= problem.tolerance)) return 'goes on';
  if (!problem.curvatureMayVanish) {
    const columns = runawayColumns(step.direction, step.bend, startDiagonal);
    return columns.length === 0 ? 'stands' : { reason: 'separable', columns };
  }
  const columns = aliasedColumns(curvature, problem.penalty);
  if (columns.length === 0) return 'stands';
  return certificate.relativeGap <= EXACT ? { reason: 'rank-deficient', columns } : 'goes on';
}

/**
 * Columns of a z that separates the classes: with the mean loss under ln 2 / N (`separatedBelow`) every row's loss is
 * under ln 2, so that every row is on its own side of the border, and without a penalty the loss falls to zero along z
 * (Albert and Anderson 1984). Proof, not judgement. Empty where the loss or a penalty on these columns forbids that.
 */
export function separatedColumns(
  { penalty: g, separatedBelow }: ConsensusProblem,
  z: Float64Array,
  loss: number,
): number[] {
  if (separatedBelow === null || !(loss < separatedBelow)) return [];
  const moved = [...z.keys()].filter((j) => z[j] !== 0);
  const free = moved.every(
    (j) => g.l1[j] === 0 && g.l2[j] === 0 && !Number.isFinite(g.lower[j]) && !Number.isFinite(g.upper[j]),
  );
  const longest = maxAbs(z);
  return free ? moved.filter((j) => Math.abs(z[j]) >= 0.5 * longest) : [];
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
