import { weightedGram } from '../gram.js';
import { FACTOR_BLOCK_ROWS, type FactorAccumulator, withPositiveDiagonal } from '../triangular-factor.js';
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
  BLOCK_ROWS_MOST,
  blockRows,
  type KernelMemory,
  PACKED_ROWS,
  POINTS_MOST,
  paddedColumns,
} from './kernel-memory.js';
import { plainKernel, rowCurvatures, rowPasses } from './plain.js';
import type { KernelExports } from './variants.js';

/** The losses by the numbers that assembly/losses.ts knows them by. */
const LOSS_NUMBERS: Readonly<Record<string, number>> = { squared: 0, logistic: 1, poisson: 2, huber: 3 };

/**
 * A kernel in WebAssembly over one memory. What has no room in its work areas (a matrix of more columns than the kernel
 * was opened for, or of too many for a square) is done by the plain twin: which of the two depends on sizes alone.
 */
export class WasmKernel implements Kernel {
  /** The factor that the square holds, for solving without a copy. */
  #resident: ResidentFactor | null = null;

  constructor(
    readonly name: KernelName,
    private readonly code: KernelExports,
    private readonly place: KernelMemory,
  ) {}

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
    const { place, code } = this;
    if (p > place.columns) {
      plainKernel.rowProducts(x, p, from, to, theta, out);
      return;
    }
    const step = blockRows(p);
    const at = place.address(theta, 0, p, place.theta);
    for (let r = from; r < to; r += step) {
      const rows = Math.min(step, to - r);
      code.rowProducts(place.address(x, r * p, rows * p, place.rows), p, rows, at, place.eta);
      out.set(place.view(place.eta, rows), r - from);
    }
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
    else this.#addRows(this.code.addWeightedRows, x, p, from, to, weights, out);
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
    else this.#addRows(this.code.addWeightedSquares, x, p, from, to, weights, out);
  }

  #addRows(
    add: KernelExports['addWeightedRows'],
    x: Float64Array,
    p: number,
    from: number,
    to: number,
    weights: Float64Array,
    out: Float64Array,
  ): void {
    const { place } = this;
    const step = blockRows(p);
    place.write(place.gradient, out.subarray(0, p));
    for (let r = from; r < to; r += step) {
      const rows = Math.min(step, to - r);
      const w = place.address(weights, r - from, rows, place.weights);
      add(place.address(x, r * p, rows * p, place.rows), p, rows, w, place.gradient);
    }
    out.set(place.view(place.gradient, p));
  }

  weightedGram(
    x: Float64Array,
    rowCount: number,
    p: number,
    weights: Float64Array | null,
    factor: number,
  ): Float64Array {
    const { place, code } = this;
    if (!this.#hasSquare(p)) return weightedGram(x, rowCount, p, weights, factor);
    this.#claimSquare();
    const padded = paddedColumns(p);
    const sums = place.view(place.square, padded * padded).fill(0);
    for (let r = 0; r < rowCount; r += PACKED_ROWS) {
      const rows = Math.min(PACKED_ROWS, rowCount - r);
      const w = weights === null ? 0 : place.address(weights, r, rows, place.weights);
      const start = place.address(x, r * p, rows * p, place.rows);
      code.packRows(start, p, rows, w, place.packed, padded);
      code.addGram(place.packed, padded, rows, place.square);
    }
    return symmetric(sums, padded, p, factor);
  }

  passes(rows: LossRows, loss: RowLoss, points: readonly PassPoint[]): PassValue[] {
    const number = LOSS_NUMBERS[loss.name];
    if (number === undefined || rows.p > this.place.columns) return rowPasses(this, rows, loss, points);
    const values: PassValue[] = [];
    for (let k = 0; k < points.length; k += POINTS_MOST)
      values.push(...this.#passes(rows, number, loss.threshold, points.slice(k, k + POINTS_MOST)));
    return values;
  }

  #passes(rows: LossRows, loss: number, threshold: number, points: readonly PassPoint[]): PassValue[] {
    const { place, code } = this;
    const { rowCount, p, x, y, weights, offset, rowCountTotal } = rows;
    const stride = 8 * paddedColumns(p);
    place.view(place.gradient, (points.length * stride) / 8).fill(0);
    const sums = place.view(place.sums, 2 * points.length).fill(0);
    points.forEach(({ theta }, k) => {
      place.write(place.theta + k * stride, theta);
    });
    // sums are made in chunks that end at multiples of 64 rows or divide them: the size of a block changes no bit
    const step = points.length === 1 && place.holds(x) ? BLOCK_ROWS_MOST : blockRows(p);
    for (let from = 0; from < rowCount; from += step) {
      const count = Math.min(step, rowCount - from);
      const block = place.address(x, from * p, count * p, place.rows);
      const response = place.address(y, from, count, place.y);
      const w = weights === null ? 0 : place.address(weights, from, count, place.weights);
      const o = offset === null ? 0 : place.address(offset, from, count, place.offset);
      points.forEach(({ state, gradient }, k) => {
        const theta = place.theta + k * stride;
        const sum = gradient === null ? 0 : place.gradient + k * stride;
        const at = [response, w, o, theta, place.eta, place.slopes, sum, place.sums + 16 * k] as const;
        code.pass(loss, threshold, rowCountTotal, block, p, count, ...at);
        state?.eta.set(place.view(place.eta, count), from);
        if (gradient !== null) state?.slopes.set(place.view(place.slopes, count), from);
      });
    }
    points.forEach(({ gradient }, k) => {
      gradient?.set(place.view(place.gradient + k * stride, p));
    });
    return points.map((_, k) => ({
      value: sums[2 * k] / rowCountTotal,
      magnitude: sums[2 * k + 1] / rowCountTotal,
    }));
  }

  curvatures(rows: Omit<LossRows, 'x' | 'p'>, loss: RowLoss, eta: Float64Array): Float64Array {
    const number = LOSS_NUMBERS[loss.name];
    if (number === undefined) return rowCurvatures(rows, loss, eta);
    const { place, code } = this;
    const { rowCount, y, weights, rowCountTotal } = rows;
    const out = new Float64Array(rowCount);
    const step = blockRows(1);
    for (let from = 0; from < rowCount; from += step) {
      const count = Math.min(step, rowCount - from);
      const response = place.address(y, from, count, place.y);
      const w = weights === null ? 0 : place.address(weights, from, count, place.weights);
      const at = place.address(eta, from, count, place.eta);
      code.curvatures(number, loss.threshold, rowCountTotal, count, response, w, at, place.slopes);
      out.set(place.view(place.slopes, count), from);
    }
    return out;
  }

  factorise(a: Float64Array, p: number): CholeskyFactor | null {
    const { place, code } = this;
    if (!this.#hasSquare(p)) return plainKernel.factorise(a, p);
    this.#claimSquare();
    const order = paddedColumns(p);
    const square = place.view(place.square, order * order);
    for (let i = 0; i < p; i++) square.set(a.subarray(i * p, i * p + i + 1), i * order);
    for (let i = p; i < order; i++) {
      square.fill(0, i * order, i * order + i);
      square[i * order + i] = 1;
    }
    if (code.cholesky(place.square, order) === 0) return null;
    const factor: ResidentFactor = { kept: null, order };
    this.#resident = factor;
    return { solve: (b) => this.#solve(factor, p, b) };
  }

  #solve(factor: ResidentFactor, p: number, b: Float64Array): Float64Array {
    const { place, code } = this;
    if (this.#resident !== factor && factor.kept !== null) {
      this.#claimSquare();
      place.write(place.square, factor.kept);
      this.#resident = factor;
    }
    place.write(place.theta, b);
    code.solve(place.square, factor.order, p, place.theta);
    return place.view(place.theta, p).slice();
  }

  #hasSquare(p: number): boolean {
    return this.place.hasSquare && p <= this.place.columns;
  }

  /** Keeps a copy of the factor in the square, if any, before something else goes there. */
  #claimSquare(): void {
    const { place } = this;
    const factor = this.#resident;
    this.#resident = null;
    if (factor !== null) factor.kept ??= place.view(place.square, factor.order * factor.order).slice();
  }

  factorAccumulator(columns: number): FactorAccumulator {
    if (!this.#hasSquare(columns)) return plainKernel.factorAccumulator(columns);
    const { place, code } = this;
    const triangle = new Float64Array((columns * (columns + 1)) / 2);
    return {
      append: (rows, rowCount) => {
        if (rowCount > FACTOR_BLOCK_ROWS) throw new RangeError(`${rowCount} rows in one block`);
        this.#claimSquare();
        place.write(place.square, triangle);
        const start = place.address(rows, 0, rowCount * columns, place.rows);
        code.packRows(start, columns, rowCount, 0, place.packed, columns);
        code.foldIn(place.square, columns, place.packed, rowCount);
        triangle.set(place.view(place.square, triangle.length));
      },
      packed: () => withPositiveDiagonal(triangle, columns),
    };
  }
}

interface ResidentFactor {
  /** A copy of the square, once something else went there. */
  kept: Float64Array | null;
  readonly order: number;
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
