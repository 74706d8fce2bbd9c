import type { LossRows, PassPoint, PassValue, RowLoss } from './kernel.js';
import { type KernelMemory, POINTS_MOST, paddedColumns } from './kernel-memory.js';
import { addTo, nothing, overRows, type RowWorker } from './row-work.js';
import { JOB_KINDS, jobOf } from './tasks.js';

/** The losses by the numbers that assembly/losses.ts knows them by. */
const LOSS_NUMBERS: Readonly<Record<string, number>> = { squared: 0, logistic: 1, poisson: 2, huber: 3 };
/** What the loss of one row costs, in numbers of x read once. */
const LOSS_EFFORT = 40;

/** Whether the compiled kernels have this loss. */
export const isKnownLoss = (loss: RowLoss): boolean => Object.hasOwn(LOSS_NUMBERS, loss.name);

/** One read of the rows for at most `POINTS_MOST` points; see `Kernel.passes`. */
export function passOver(
  worker: RowWorker,
  place: KernelMemory,
  rows: LossRows,
  { name, threshold }: RowLoss,
  points: readonly PassPoint[],
): PassValue[] {
  const { rowCount, p, x, y, weights, offset, rowCountTotal } = rows;
  const padded = paddedColumns(p);
  const { slotNumbers } = place;
  const totals = points.map(({ theta, gradient }, k) => {
    place.write(place.theta + 8 * k * padded, theta);
    gradient?.fill(0);
    return { value: 0, magnitude: 0 };
  });
  const job = jobOf({
    kind: JOB_KINDS.pass,
    p,
    loss: LOSS_NUMBERS[name],
    threshold,
    rowCountTotal,
    theta: place.theta,
    out: place.gradient,
    sums: place.sums,
    slotNumbers,
    points: points.length,
    steep: points.map(({ gradient }) => Number(gradient !== null)),
  });
  worker.do({
    ...overRows(x, p, 0, rowCount),
    job,
    effort: (p + LOSS_EFFORT) * points.length,
    aim(areas, at, count) {
      job.y = place.address(y, at, count, areas.y);
      job.weights = weights === null ? 0 : place.address(weights, at, count, areas.weights);
      job.offset = offset === null ? 0 : place.address(offset, at, count, areas.offset);
      points.forEach(({ state }, k) => {
        job.etas[k] = state === null ? areas.etas[k] : place.target(state.eta, at, areas.etas[k]);
        job.slopes[k] = state === null ? areas.slopes[k] : place.target(state.slopes, at, areas.slopes[k]);
      });
    },
    collect(areas, at, count) {
      points.forEach(({ state, gradient }, k) => {
        if (state === null) return;
        place.collect(state.eta, at, count, areas.etas[k]);
        if (gradient !== null) place.collect(state.slopes, at, count, areas.slopes[k]);
      });
    },
    clear(stripes) {
      place.clearSlots(stripes, points.length * padded);
      place.view(place.sums, 2 * POINTS_MOST * stripes).fill(0);
    },
    merge(stripe) {
      const sums = place.view(place.sums + 16 * POINTS_MOST * stripe, 2 * points.length);
      points.forEach(({ gradient }, k) => {
        totals[k].value += sums[2 * k];
        totals[k].magnitude += sums[2 * k + 1];
        if (gradient === null) return;
        addTo(place.view(place.gradient + 8 * (stripe * slotNumbers + k * padded), p), gradient);
      });
    },
  });
  return totals.map(({ value, magnitude }) => ({
    value: value / rowCountTotal,
    magnitude: magnitude / rowCountTotal,
  }));
}

/** See `Kernel.curvatures`. */
export function curvaturesOver(
  worker: RowWorker,
  place: KernelMemory,
  rows: LossRows,
  { name, threshold }: RowLoss,
  eta: Float64Array,
): Float64Array {
  const { rowCount, y, weights, rowCountTotal } = rows;
  const out = new Float64Array(rowCount);
  const job = jobOf({ kind: JOB_KINDS.curvatures, loss: LOSS_NUMBERS[name], threshold, rowCountTotal });
  worker.do({
    ...overRows(null, LOSS_EFFORT, 0, rowCount),
    job,
    aim(areas, at, count) {
      job.y = place.address(y, at, count, areas.y);
      job.weights = weights === null ? 0 : place.address(weights, at, count, areas.weights);
      job.eta = place.address(eta, at, count, areas.etas[0]);
      job.out = areas.slopes[0];
    },
    collect: ({ slopes }, at, count) => place.collect(out, at, count, slopes[0]),
    clear: nothing,
    merge: nothing,
  });
  return out;
}
