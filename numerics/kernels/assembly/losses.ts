import { exp, log1p, negativeSize, one as unit } from './elementary';
import { logisticLosses } from './logistic';
import { addCachedRows, rowProducts } from './rows';
import { loadRows, NUMBER, VECTOR, zeros } from './vectors';

/** The losses by number, as `wasm-kernel.ts` names them. */
const SQUARED: i32 = 0;
const LOGISTIC: i32 = 1;
const POISSON: i32 = 2;

/** Largest exponent taken: see worker/losses/poisson.ts. */
const EXPONENT_MOST: f64 = 300;

/**
 * Rows that the product with θ and the gradient read one after the other: they should stay in the second-level cache.
 * Smaller chunks, in the first level, stop the stream from memory too often (a third of the time at 500 columns).
 */
const CACHED_BYTES: usize = 262144;
const CHUNK_ROWS_MOST: i32 = 1024;
/** Rows whose losses make one partial sum: the rounding error of a total stays far below n ulp. */
const SUMMED_ROWS: i32 = 64;

/**
 * One block of rows at θ: predictors to `eta`, Σ w · loss and Σ |w · loss| added to `sums`; with `gradient` ≠ 0 the
 * slopes (w / N) · ∂loss/∂η to `slopes`, and Σ slope_r x_r added to `gradient`. Zero pointers for absent weights and
 * offsets.
 */
export function pass(
  loss: i32,
  threshold: f64,
  rowCountTotal: f64,
  x: usize,
  p: i32,
  rows: i32,
  y: usize,
  weights: usize,
  offset: usize,
  theta: usize,
  eta: usize,
  slopes: usize,
  gradient: usize,
  sums: usize,
): void {
  const stride = <usize>p * NUMBER;
  // powers of 2, so that partial sums end where they end however the rows come in blocks of 64
  let step = CHUNK_ROWS_MOST;
  while (step > 4 && <usize>step * stride > CACHED_BYTES) step >>= 1;
  for (let from = 0; from < rows; from += step) {
    const to = min(from + step, rows);
    const start = x + <usize>from * stride;
    rowProducts(start, p, to - from, theta, eta + <usize>from * NUMBER);
    for (let at = from; at < to; at += SUMMED_ROWS) {
      const skip = <usize>at * NUMBER;
      const w: usize = weights == 0 ? 0 : weights + skip;
      const o: usize = offset == 0 ? 0 : offset + skip;
      const s: usize = gradient == 0 ? 0 : slopes + skip;
      const count = min(SUMMED_ROWS, to - at);
      if (loss == LOGISTIC && w == 0) logisticLosses(rowCountTotal, count, y + skip, o, eta + skip, s, sums);
      else rowLosses(loss, threshold, rowCountTotal, count, y + skip, w, o, eta + skip, s, sums);
    }
    if (gradient != 0) addCachedRows(start, p, to - from, slopes + <usize>from * NUMBER, gradient);
  }
}

/** What `pass` does between the two products; an odd last row is computed in both lanes and counted once. */
function rowLosses(
  loss: i32,
  threshold: f64,
  rowCountTotal: f64,
  rows: i32,
  y: usize,
  weights: usize,
  offset: usize,
  eta: usize,
  slopes: usize,
  sums: usize,
): void {
  const one = unit();
  const total = f64x2.splat(rowCountTotal);
  const shareOfOne = f64x2.div(one, total);
  const edge = f64x2.splat(threshold);
  let value = zeros();
  let magnitude = zeros();
  const end = eta + <usize>rows * NUMBER;
  for (; eta < end; eta += VECTOR, y += VECTOR) {
    const single = eta + VECTOR > end;
    let at = loadRows(eta, single);
    const response = loadRows(y, single);
    if (offset != 0) {
      at = f64x2.add(at, loadRows(offset, single));
      offset += VECTOR;
    }
    let term: v128;
    let slope: v128;
    if (loss == LOGISTIC) {
      const e = exp(negativeSize(at));
      const tail = f64x2.div(e, f64x2.add(one, e));
      term = f64x2.add(f64x2.sub(f64x2.pmax(at, zeros()), f64x2.mul(response, at)), log1p(e));
      const rising = f64x2.sub(f64x2.sub(one, response), tail);
      slope = v128.bitselect(rising, f64x2.sub(tail, response), f64x2.ge(at, zeros()));
    } else if (loss == POISSON) {
      const mean = exp(f64x2.min(at, f64x2.splat(EXPONENT_MOST)));
      const beyond = f64x2.max(f64x2.sub(at, f64x2.splat(EXPONENT_MOST)), zeros());
      term = f64x2.sub(f64x2.mul(mean, f64x2.add(one, beyond)), f64x2.mul(response, at));
      slope = f64x2.sub(mean, response);
    } else if (loss == SQUARED) {
      slope = f64x2.sub(at, response);
      term = f64x2.mul(f64x2.mul(f64x2.splat(0.5), slope), slope);
    } else {
      const away = f64x2.sub(at, response);
      const size = f64x2.abs(away);
      const within = f64x2.mul(f64x2.mul(f64x2.splat(0.5), size), size);
      const outside = f64x2.sub(f64x2.mul(edge, size), f64x2.splat(0.5 * threshold * threshold));
      term = v128.bitselect(within, outside, f64x2.le(size, edge));
      slope = f64x2.min(f64x2.max(away, f64x2.neg(edge)), edge);
    }
    let share = shareOfOne;
    if (weights != 0) {
      const weight = loadRows(weights, single);
      weights += VECTOR;
      term = f64x2.mul(weight, term);
      share = f64x2.div(weight, total);
    }
    slope = f64x2.mul(share, slope);
    if (single) {
      term = f64x2.replace_lane(term, 1, 0);
      v128.store64_lane(eta, at, 0);
      if (slopes != 0) v128.store64_lane(slopes, slope, 0);
    } else {
      v128.store(eta, at);
      if (slopes != 0) v128.store(slopes, slope);
    }
    value = f64x2.add(value, term);
    magnitude = f64x2.add(magnitude, f64x2.abs(term));
    if (slopes != 0) slopes += VECTOR;
  }
  f64.store(sums, f64.load(sums) + (f64x2.extract_lane(value, 0) + f64x2.extract_lane(value, 1)));
  const size = f64x2.extract_lane(magnitude, 0) + f64x2.extract_lane(magnitude, 1);
  f64.store(sums, f64.load(sums, 8) + size, 8);
}

/** out[r] ← (w / N) · ∂²loss/∂η² at the predictors. */
export function curvatures(
  loss: i32,
  threshold: f64,
  rowCountTotal: f64,
  rows: i32,
  y: usize,
  weights: usize,
  eta: usize,
  out: usize,
): void {
  const one = unit();
  const total = f64x2.splat(rowCountTotal);
  const end = eta + <usize>rows * NUMBER;
  for (; eta < end; eta += VECTOR, y += VECTOR, out += VECTOR) {
    const single = eta + VECTOR > end;
    const at = loadRows(eta, single);
    let bend = one;
    if (loss == LOGISTIC) {
      const e = exp(negativeSize(at));
      const whole = f64x2.add(one, e);
      bend = f64x2.div(e, f64x2.mul(whole, whole));
    } else if (loss == POISSON) {
      bend = exp(f64x2.min(at, f64x2.splat(EXPONENT_MOST)));
    } else if (loss != SQUARED) {
      const size = f64x2.abs(f64x2.sub(loadRows(y, single), at));
      bend = v128.and(one, f64x2.le(size, f64x2.splat(threshold)));
    }
    let share = f64x2.div(one, total);
    if (weights != 0) {
      share = f64x2.div(loadRows(weights, single), total);
      weights += VECTOR;
    }
    bend = f64x2.mul(share, bend);
    if (single) v128.store64_lane(out, bend, 0);
    else v128.store(out, bend);
  }
}
