import { minimiseByActiveSet } from './active-set.js';
import { cholesky, choleskySolve } from './cholesky.js';
import { type Penalty, proximalOperator } from './penalty.js';

const SWEEPS_MOST = 2000;
/** Full sweeps without a settled active set after which one is searched for directly. */
const SEARCH_AFTER = 32;
/** Relative size of a step, in the metric's norm, under which the descent has converged. */
const STEP_LEAST = 1e-14;

/**
 * argmin g(z) + ½ zᵀMz − bᵀz by cyclic coordinate descent (Friedman, Hastie, Tibshirani 2010), sweeping the active
 * set between full sweeps, and finished by an exact solve on the active set once its signs have settled.
 * Where it creeps, the active set is searched for directly. M row-major p × p with a positive diagonal. Null where
 * neither settles.
 */
export function minimiseQuadratic(
  g: Penalty,
  metric: Float64Array,
  b: Float64Array,
  start: Float64Array,
): Float64Array | null {
  const p = b.length;
  const z = start.map((value, j) => Math.min(Math.max(value, g.lower[j]), g.upper[j]));
  const product = times(metric, z, p);
  const everything = Int32Array.from({ length: p }, (_, j) => j);
  const size = Math.sqrt(b.reduce((sum, value, j) => sum + (value * value) / metric[j * p + j], 0));
  let polishAt = 2;
  for (let sweep = 1; sweep <= SWEEPS_MOST; sweep++) {
    const tolerance = STEP_LEAST * (size + Math.sqrt(Math.abs(energy(z, product))));
    const moved = sweepOver(g, metric, b, z, product, everything);
    if (moved < tolerance) return polish(g, metric, b, z) ?? z;
    if (sweep >= polishAt) {
      const polished = polish(g, metric, b, z);
      if (polished !== null) return polished;
      polishAt *= 2;
    }
    if (sweep === SEARCH_AFTER) {
      const found = minimiseByActiveSet(g, metric, b, z);
      if (found !== null) return found;
    }
    const active = everything.filter((j) => z[j] !== 0 || g.l1[j] === 0);
    for (let inner = 0; inner < 10; inner++) {
      if (sweepOver(g, metric, b, z, product, active) < tolerance) break;
    }
  }
  return null;
}

/** One cycle over the given coordinates; keeps `product` = M z. Returns the longest step in the metric's norm. */
function sweepOver(
  g: Penalty,
  metric: Float64Array,
  b: Float64Array,
  z: Float64Array,
  product: Float64Array,
  coordinates: Int32Array,
): number {
  const p = b.length;
  let longest = 0;
  for (const j of coordinates) {
    const row = j * p;
    const a = metric[row + j];
    const next = proximalOperator(g, j, a, b[j] - product[j] + a * z[j]);
    const step = next - z[j];
    if (step === 0) continue;
    z[j] = next;
    for (let k = 0; k < p; k++) product[k] += step * metric[row + k];
    longest = Math.max(longest, Math.abs(step) * Math.sqrt(a + g.l2[j]));
  }
  return longest;
}

/**
 * The exact minimiser with the zeros, signs and bounds of z, or null where that point does not keep them or does not
 * satisfy the optimality conditions of the other coordinates.
 */
function polish(g: Penalty, metric: Float64Array, b: Float64Array, z: Float64Array): Float64Array | null {
  const p = b.length;
  const free: number[] = [];
  const fixed = Float64Array.from(z);
  for (let j = 0; j < p; j++) {
    const bounded = z[j] <= g.lower[j] || z[j] >= g.upper[j];
    if (bounded || (z[j] === 0 && g.l1[j] !== 0)) continue;
    free.push(j);
    fixed[j] = 0;
  }
  const pull = times(metric, fixed, p);
  const m = free.length;
  const matrix = new Float64Array(m * m);
  const right = new Float64Array(m);
  free.forEach((j, a) => {
    free.forEach((k, c) => {
      matrix[a * m + c] = metric[j * p + k];
    });
    matrix[a * m + a] += g.l2[j];
    right[a] = b[j] - pull[j] - g.l1[j] * Math.sign(z[j]);
  });
  const factor = cholesky(matrix, m);
  if (factor === null) return null;
  const solution = choleskySolve(factor, m, right);
  const candidate = fixed;
  free.forEach((j, a) => {
    candidate[j] = solution[a];
  });
  return isOptimal(g, metric, b, candidate, z) ? candidate : null;
}

function isOptimal(
  g: Penalty,
  metric: Float64Array,
  b: Float64Array,
  candidate: Float64Array,
  z: Float64Array,
): boolean {
  const p = b.length;
  const product = times(metric, candidate, p);
  for (let j = 0; j < p; j++) {
    const value = candidate[j];
    if (value < g.lower[j] || value > g.upper[j]) return false;
    if (g.l1[j] > 0 && z[j] !== 0 && Math.sign(value) !== Math.sign(z[j])) return false;
    const slope = product[j] - b[j] + g.l2[j] * value;
    const slack = 1e-12 * (Math.abs(product[j]) + Math.abs(b[j]) + g.l1[j]);
    const atLower = value <= g.lower[j];
    const atUpper = value >= g.upper[j];
    const pushed = value !== 0 ? slope + g.l1[j] * Math.sign(value) : 0;
    if (atLower || atUpper) {
      if (atLower && !atUpper && pushed < -slack) return false;
      if (atUpper && !atLower && pushed > slack) return false;
    } else if (value === 0 && Math.abs(slope) > g.l1[j] + slack) return false;
  }
  return true;
}

function times(matrix: Float64Array, x: Float64Array, p: number): Float64Array {
  const out = new Float64Array(p);
  for (let j = 0; j < p; j++) {
    const value = x[j];
    if (value === 0) continue;
    const row = j * p;
    for (let k = 0; k < p; k++) out[k] += value * matrix[row + k];
  }
  return out;
}

function energy(z: Float64Array, product: Float64Array): number {
  let sum = 0;
  for (let j = 0; j < z.length; j++) sum += z[j] * product[j];
  return sum;
}
