import { cholesky, choleskySolve } from './cholesky.js';
import type { Penalty } from './penalty.js';

/** Solves on a free set at most, per coordinate. */
const SOLVES_MOST = 20;
/** Violation of an optimality condition, relative to the terms in it, that counts as rounding. */
const SLACK = 1e-12;

/**
 * argmin g(z) + ½ zᵀMz − bᵀz by an active set of zeros, signs and bounds (Lee, Battle, Raina, Ng 2007, with bounds): an
 * exact solve on the free coordinates, cut where a sign or bound would be crossed, then the coordinate freed that
 * violates its condition most. Each solve lowers the objective, so that it ends; it settles where M is so badly
 * conditioned that coordinate descent creeps. M row-major p × p; `start` within the bounds. Null where M is not positive
 * definite on a free set, or where rounding keeps it from settling.
 */
export function minimiseByActiveSet(
  g: Penalty,
  metric: Float64Array,
  b: Float64Array,
  start: Float64Array,
): Float64Array | null {
  const p = b.length;
  const z = Float64Array.from(start);
  // sign of each free coordinate; 0 for those held at zero or at a bound
  const signs = z.map((value, j) => {
    const held = value <= g.lower[j] || value >= g.upper[j] || (value === 0 && g.l1[j] > 0);
    return held ? 0 : value >= 0 ? 1 : -1;
  });
  for (let solves = 0; solves < SOLVES_MOST * (p + 5); solves++) {
    const target = freeMinimiser(g, metric, b, z, signs);
    if (target === null) return null;
    if (moveTowards(g, z, target, signs)) continue;
    const freed = worstHeld(g, metric, b, z, signs);
    if (freed === null) return z;
    signs[freed.column] = freed.sign;
  }
  return null;
}

/** The minimiser over the free coordinates with their signs kept, the others where they are. */
function freeMinimiser(
  g: Penalty,
  metric: Float64Array,
  b: Float64Array,
  z: Float64Array,
  signs: Float64Array,
): Float64Array | null {
  const p = b.length;
  const free = [...signs.keys()].filter((j) => signs[j] !== 0);
  const m = free.length;
  const matrix = new Float64Array(m * m);
  const right = new Float64Array(m);
  free.forEach((j, a) => {
    let pull = 0;
    for (let k = 0; k < p; k++) if (signs[k] === 0) pull += metric[j * p + k] * z[k];
    free.forEach((k, c) => {
      matrix[a * m + c] = metric[j * p + k];
    });
    matrix[a * m + a] += g.l2[j];
    right[a] = b[j] - pull - g.l1[j] * signs[j];
  });
  const factor = cholesky(matrix, m);
  if (factor === null) return null;
  const solution = choleskySolve(factor, m, right);
  const target = Float64Array.from(z);
  free.forEach((j, a) => {
    target[j] = solution[a];
  });
  return target;
}

/** Moves z to the target, or to the first sign or bound on the way, where that coordinate is then held: true if so. */
function moveTowards(g: Penalty, z: Float64Array, target: Float64Array, signs: Float64Array): boolean {
  let share = 1;
  let blocking = -1;
  let stop = 0;
  for (let j = 0; j < z.length; j++) {
    if (signs[j] === 0) continue;
    const lower = g.l1[j] > 0 && signs[j] > 0 ? Math.max(0, g.lower[j]) : g.lower[j];
    const upper = g.l1[j] > 0 && signs[j] < 0 ? Math.min(0, g.upper[j]) : g.upper[j];
    const limit = target[j] < lower ? lower : target[j] > upper ? upper : null;
    if (limit === null) continue;
    const reach = (limit - z[j]) / (target[j] - z[j]);
    if (blocking >= 0 && reach >= share) continue;
    share = Math.max(reach, 0);
    blocking = j;
    stop = limit;
  }
  for (let j = 0; j < z.length; j++) if (signs[j] !== 0) z[j] += share * (target[j] - z[j]);
  if (blocking < 0) return false;
  z[blocking] = stop;
  signs[blocking] = 0;
  return true;
}

/** The held coordinate whose one-sided slope promises most in the metric's scale, and the sign it takes when freed. */
function worstHeld(
  g: Penalty,
  metric: Float64Array,
  b: Float64Array,
  z: Float64Array,
  signs: Float64Array,
): { column: number; sign: number } | null {
  const p = b.length;
  let worst: { column: number; sign: number } | null = null;
  let most = 0;
  for (let j = 0; j < p; j++) {
    if (signs[j] !== 0) continue;
    let product = 0;
    for (let k = 0; k < p; k++) product += metric[j * p + k] * z[k];
    const smooth = product - b[j] + g.l2[j] * z[j];
    const slack = SLACK * (Math.abs(product) + Math.abs(b[j]) + g.l1[j]);
    const upwards = z[j] >= 0 ? 1 : -1;
    const downwards = z[j] > 0 ? 1 : -1;
    const rise = z[j] < g.upper[j] ? -(smooth + g.l1[j] * upwards) : 0;
    const fall = z[j] > g.lower[j] ? smooth + g.l1[j] * downwards : 0;
    const gain = Math.max(rise, fall) - slack;
    if (!(gain > 0)) continue;
    const promise = gain / Math.sqrt(metric[j * p + j]);
    if (promise <= most) continue;
    most = promise;
    worst = { column: j, sign: rise > fall ? upwards : downwards };
  }
  return worst;
}
