import { exp, logOfProduct, negativeSize, one as unit } from './elementary';
import { laneSum, loadRows, NUMBER, VECTOR, zeros } from './vectors';

/**
 * `rowLosses` (losses.ts) of the logistic loss for rows that all weigh 1, at most 1024: η⁺ − y η + ln(1 + e^−|η|), with one
 * logarithm of the product of all 1 + e^−|η|. The product is kept with what its rounding leaves out (Dekker 1971), so that
 * losses far below 1 keep their digits.
 */
export function logisticLosses(
  rowCountTotal: f64,
  rows: i32,
  y: usize,
  offset: usize,
  eta: usize,
  slopes: usize,
  sums: usize,
): void {
  const one = unit();
  const share = f64x2.div(one, f64x2.splat(rowCountTotal));
  let value = zeros();
  let magnitude = zeros();
  let product = one;
  let rest = zeros();
  const end = eta + <usize>rows * NUMBER;
  for (; eta < end; eta += VECTOR, y += VECTOR) {
    const single = eta + VECTOR > end;
    let at = loadRows(eta, single);
    const response = loadRows(y, single);
    if (offset != 0) {
      at = f64x2.add(at, loadRows(offset, single));
      offset += VECTOR;
    }
    let e = exp(negativeSize(at));
    const tail = f64x2.div(e, f64x2.add(one, e));
    let linear = f64x2.sub(f64x2.pmax(at, zeros()), f64x2.mul(response, at));
    if (single) {
      v128.store64_lane(eta, at, 0);
      e = f64x2.replace_lane(e, 1, 0);
      linear = f64x2.replace_lane(linear, 1, 0);
    } else v128.store(eta, at);
    const step = f64x2.mul(product, e);
    const next = f64x2.add(product, step);
    rest = f64x2.add(f64x2.add(rest, f64x2.mul(rest, e)), f64x2.sub(step, f64x2.sub(next, product)));
    product = next;
    value = f64x2.add(value, linear);
    magnitude = f64x2.add(magnitude, f64x2.abs(linear));
    if (slopes == 0) continue;
    const rising = f64x2.sub(f64x2.sub(one, response), tail);
    const slope = f64x2.mul(share, v128.bitselect(rising, f64x2.sub(tail, response), f64x2.ge(at, zeros())));
    if (single) v128.store64_lane(slopes, slope, 0);
    else v128.store(slopes, slope);
    slopes += VECTOR;
  }
  const curved = laneSum(logOfProduct(product, rest));
  f64.store(sums, f64.load(sums) + (laneSum(value) + curved));
  f64.store(sums, f64.load(sums, 8) + (laneSum(magnitude) + curved), 8);
}
