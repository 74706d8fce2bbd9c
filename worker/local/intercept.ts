import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { rowCurvatures } from './row-pass.js';

/**
 * The intercept of a site's own. The shard has the ones of the intercept as its first column, and one more column than
 * there are coefficients θ.
 */

const STEPS_MOST = 200;
/** A step this small is rounding of the sums. */
const STEP_NOISE = 2 * Number.EPSILON;
/** A bracket this narrow, relative to its ends, is rounding. */
const WIDTH = 4 * Number.EPSILON;
/** Where the bracket may end: beyond, no mean changes any more. */
const REACH = 2 ** 20;

/** Coefficients of the shard's columns where the intercept is best for θ; ±∞ first where no finite one is. */
export function atBestIntercept(shard: Shard, loss: Loss, theta: Float64Array): Float64Array {
  const { rowCount, p, rows, offset } = shard;
  const point = new Float64Array(p);
  point.set(theta, 1);
  const eta = new Float64Array(rowCount);
  rows.products(0, rowCount, point, eta);
  if (offset !== null) for (let r = 0; r < rowCount; r++) eta[r] += offset[r];
  point[0] = isInformative(shard, loss) ? bestShift(shard, loss, eta) : limitOf(shard, loss);
  return point;
}

/** False where the rows bear nothing on θ: none counts, or the loss falls for ever as the intercept goes to ±∞. */
export function isInformative({ y, weights }: Shard, { name }: Loss): boolean {
  let least = Number.POSITIVE_INFINITY;
  let most = Number.NEGATIVE_INFINITY;
  for (let r = 0; r < y.length; r++) {
    if (weights !== null && !(weights[r] > 0)) continue;
    least = Math.min(least, y[r]);
    most = Math.max(most, y[r]);
  }
  if (least > most) return false;
  if (name === 'logistic') return most > 0 && least < 1;
  return name !== 'poisson' || most > 0;
}

function limitOf({ y, weights }: Shard, { name }: Loss): number {
  const counted = y.filter((_, r) => weights === null || weights[r] > 0);
  if (counted.length === 0) return 0;
  return name === 'logistic' && counted[0] > 0 ? Number.POSITIVE_INFINITY : Number.NEGATIVE_INFINITY;
}

/** argmin over b of Σ w · loss(y, η + b): Newton's method within a bracket of the slope's zero. */
function bestShift(shard: Shard, loss: Loss, eta: Float64Array): number {
  let [low, high] = bracketOf(shard, loss, eta);
  let shift = 0.5 * (low + high);
  for (let steps = 0; steps < STEPS_MOST; steps++) {
    const { slope, curvature } = slopeAt(shard, loss, eta, shift);
    if (slope === 0) return shift;
    if (slope > 0) high = shift;
    else low = shift;
    if (high - low <= WIDTH * Math.max(Math.abs(low), Math.abs(high))) return shift;
    const newton = shift - slope / curvature;
    const next = newton > low && newton < high ? newton : 0.5 * (low + high);
    if (Math.abs(next - shift) <= STEP_NOISE * Math.max(1, Math.abs(shift))) return next;
    shift = next;
  }
  return shift;
}

/** Ends between which the slope changes its sign, or where nothing changes any more. */
function bracketOf(shard: Shard, loss: Loss, eta: Float64Array): [number, number] {
  const rises = (shift: number): boolean => slopeAt(shard, loss, eta, shift).slope >= 0;
  let low = -1;
  let high = 1;
  for (let reach = 1; rises(low) && reach < REACH * scaleOf(eta, shard.y); reach *= 2) low -= reach;
  for (let reach = 1; !rises(high) && reach < REACH * scaleOf(eta, shard.y); reach *= 2) high += reach;
  return [low, high];
}

function scaleOf(eta: Float64Array, y: Float64Array): number {
  let most = 1;
  for (let r = 0; r < eta.length; r++) most = Math.max(most, Math.abs(eta[r]), Math.abs(y[r]));
  return most;
}

function slopeAt(
  { y, weights }: Shard,
  loss: Loss,
  eta: Float64Array,
  shift: number,
): { slope: number; curvature: number } {
  let slope = 0;
  let curvature = 0;
  for (let r = 0; r < eta.length; r++) {
    const weight = weights === null ? 1 : weights[r];
    if (weight === 0) continue;
    slope += weight * loss.slope(y[r], eta[r] + shift);
    curvature += weight * loss.curvature(y[r], eta[r] + shift);
  }
  return { slope, curvature };
}

/**
 * Means of the columns weighted by the rows' curvature, ones first: −∂b/∂θ for the best intercept b (implicit function
 * theorem). Zeros where no row has curvature.
 */
export function curvatureMeans(shard: Shard, loss: Loss, eta: Float64Array): Float64Array {
  const { p, rowCount, rows } = shard;
  const means = new Float64Array(p);
  rows.addWeighted(0, rowCount, rowCurvatures(shard, loss, eta), means);
  const total = means[0];
  for (let j = 0; j < p; j++) means[j] = total > 0 ? means[j] / total : 0;
  return means;
}

/** A vector by all columns as one by θ, the intercept moving along: v_θ − v_b · means. */
export function alongIntercept(vector: Float64Array, means: Float64Array): Float64Array {
  const out = new Float64Array(vector.length - 1);
  for (let j = 0; j < out.length; j++) out[j] = vector[j + 1] - vector[0] * means[j + 1];
  return out;
}

/**
 * T A Tᵀ for a packed A over all columns, T = [−means, I]: products of rows about the means. With A the curvature and
 * its own means it is the Schur complement of the intercept.
 */
export function aboutMeans(packed: Float64Array, means: Float64Array): Float64Array {
  const p = means.length - 1;
  const out = new Float64Array((p * (p + 1)) / 2);
  const corner = packed[0];
  const lead = (i: number): number => packed[((i + 1) * (i + 2)) / 2];
  for (let i = 0, at = 0; i < p; i++) {
    const row = ((i + 1) * (i + 2)) / 2 + 1;
    const mean = means[i + 1];
    for (let j = 0; j <= i; j++, at++) {
      const other = means[j + 1];
      out[at] = packed[row + j] - mean * lead(j) - other * lead(i) + mean * other * corner;
    }
  }
  return out;
}
