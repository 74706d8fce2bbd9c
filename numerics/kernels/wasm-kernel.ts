import { weightedGram } from '../gram.js';
import type { FactorAccumulator } from '../triangular-factor.js';
import type { Crew } from './crew.js';
import type {
  CholeskyFactor,
  Kernel,
  KernelName,
  LossRows,
  PassPoint,
  PassValue,
  RowLoss,
} from './kernel.js';
import {
  type KernelMemory,
  PACKED_ROWS,
  POINTS_MOST,
  paddedColumns,
  STRIPED_COLUMNS_MOST,
} from './kernel-memory.js';
import { curvaturesOver, isKnownLoss, passOver } from './loss-work.js';
import { plainKernel, rowCurvatures, rowPasses } from './plain.js';
import { addTo, nothing, overRows, RowWorker } from './row-work.js';
import { Square } from './square.js';
import { JOB_KINDS, jobOf } from './tasks.js';
import type { KernelExports } from './variants.js';

/** A Gram matrix costs p multiply-adds a number: so many in the time of reading one. */
const GRAM_EFFORT = 8;

/**
 * A kernel in WebAssembly over one memory. What has no room in its work areas (a matrix of more columns than the kernel
 * was opened for, or of too many for a square) is done by the plain twin: which of the two depends on sizes alone.
 */
export class WasmKernel implements Kernel {
  readonly #rows: RowWorker;
  readonly #square: Square;

  constructor(
    readonly name: KernelName,
    code: KernelExports,
    private readonly place: KernelMemory,
    module: WebAssembly.Module,
    crew: Crew | null,
  ) {
    const together = crew === null ? null : { size: crew.size, post: crew.attach(module, place.memory) };
    this.#rows = new RowWorker(code, place, together);
    this.#square = new Square(code, place);
  }

  numbers(count: number): Float64Array {
    return this.place.allocate(count) ?? new Float64Array(count);
  }

  rowProducts(
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    theta: Float64Array,
    out: Float64Array,
  ): void {
    const { place } = this;
    if (p > place.columns) {
      plainKernel.rowProducts(x, p, from, to, theta, out);
      return;
    }
    const job = jobOf({ kind: JOB_KINDS.products, p, theta: place.address(theta, 0, p, place.theta) });
    this.#rows.do({
      ...overRows(x, p, from, to - from),
      job,
      aim({ etas }, at) {
        job.out = place.target(out, at, etas[0]);
      },
      collect: ({ etas }, at, count) => place.collect(out, at, count, etas[0]),
      clear: nothing,
      merge: nothing,
    });
  }

  addWeightedRows(
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    weights: Float64Array,
    out: Float64Array,
  ): void {
    if (p > this.place.columns) plainKernel.addWeightedRows(x, p, from, to, weights, out);
    else this.#addRows(JOB_KINDS.rowSums, x, p, from, to, weights, out);
  }

  addWeightedSquares(
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    weights: Float64Array,
    out: Float64Array,
  ): void {
    if (p > this.place.columns) plainKernel.addWeightedSquares(x, p, from, to, weights, out);
    else this.#addRows(JOB_KINDS.squareSums, x, p, from, to, weights, out);
  }

  #addRows(
    kind: number,
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    weights: Float64Array,
    out: Float64Array,
  ): void {
    const { place } = this;
    const { slotNumbers } = place;
    const job = jobOf({ kind, p, out: place.gradient, slotNumbers });
    this.#rows.do({
      ...overRows(x, p, from, to - from),
      job,
      aim(areas, at, count) {
        job.weights = place.address(weights, at, count, areas.weights);
      },
      collect: nothing,
      clear: (stripes) => place.clearSlots(stripes, p),
      merge: (stripe) => addTo(place.view(place.gradient + 8 * stripe * slotNumbers, p), out),
    });
  }

  weightedGram(
    x: Float64Array,
    rowCount: number,
    p: number,
    weights: Float64Array | null,
    factor: number,
  ): Float64Array {
    const { place } = this;
    if (!this.#square.fits(p)) return weightedGram(x, rowCount, p, weights, factor);
    this.#square.claim();
    const padded = paddedColumns(p);
    const sums = place.view(place.square, padded * padded).fill(0);
    const inBands = p > STRIPED_COLUMNS_MOST;
    const { packed, packedNumbers } = place;
    const slotNumbers = inBands ? 0 : padded * padded;
    const job = jobOf({
      kind: inBands ? JOB_KINDS.gramBands : JOB_KINDS.gramStripes,
      p,
      out: inBands ? place.square : place.squares,
      slotNumbers,
      packed,
      packedNumbers,
    });
    this.#rows.do({
      ...overRows(x, p, 0, rowCount),
      job,
      effort: (p * p) / GRAM_EFFORT,
      inBands,
      blockRows: PACKED_ROWS,
      aim(areas, at, count) {
        job.weights = weights === null ? 0 : place.address(weights, at, count, areas.weights);
      },
      collect: nothing,
      clear: (stripes) => place.view(place.squares, stripes * slotNumbers).fill(0),
      merge: (stripe) => addTo(place.view(place.squares + 8 * stripe * slotNumbers, slotNumbers), sums),
    });
    return symmetric(sums, padded, p, factor);
  }

  passes(rows: LossRows, loss: RowLoss, points: readonly PassPoint[]): PassValue[] {
    if (!isKnownLoss(loss) || rows.p > this.place.columns) return rowPasses(this, rows, loss, points);
    const values: PassValue[] = [];
    for (let k = 0; k < points.length; k += POINTS_MOST)
      values.push(...passOver(this.#rows, this.place, rows, loss, points.slice(k, k + POINTS_MOST)));
    return values;
  }

  curvatures(rows: LossRows, loss: RowLoss, eta: Float64Array): Float64Array {
    return isKnownLoss(loss)
      ? curvaturesOver(this.#rows, this.place, rows, loss, eta)
      : rowCurvatures(rows, loss, eta);
  }

  factorise(a: Float64Array, p: number): CholeskyFactor | null {
    return this.#square.fits(p) ? this.#square.factorise(a, p) : plainKernel.factorise(a, p);
  }

  factorAccumulator(columns: number): FactorAccumulator {
    if (!this.#square.fits(columns)) return plainKernel.factorAccumulator(columns);
    return this.#square.factorAccumulator(columns);
  }
}

/** factor · sums, both triangles from the lower one, p × p. */
function symmetric(sums: Float64Array, padded: number, p: number, factor: number): Float64Array {
  const out = new Float64Array(p * p);
  for (let i = 0; i < p; i++) {
    for (let j = 0; j <= i; j++) {
      const value = factor * sums[i * padded + j];
      out[i * p + j] = value;
      out[j * p + i] = value;
    }
  }
  return out;
}
