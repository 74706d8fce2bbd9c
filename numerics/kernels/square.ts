import { FACTOR_BLOCK_ROWS, type FactorAccumulator, withPositiveDiagonal } from '../triangular-factor.js';
import type { CholeskyFactor } from './kernel.js';
import { type KernelMemory, paddedColumns } from './kernel-memory.js';
import type { KernelExports } from './variants.js';

/** The square work area of a memory: one Cholesky factor stays in it until something else goes there. */
export class Square {
  /** The factor that the square holds, for solving without a copy. */
  #resident: ResidentFactor | null = null;

  constructor(
    private readonly code: KernelExports,
    private readonly place: KernelMemory,
  ) {}

  /** Whether matrices of p columns have their place here. */
  fits(p: number): boolean {
    return this.place.hasSquare && p <= this.place.columns;
  }

  /** Keeps a copy of the factor in the square, if any, before something else goes there. */
  claim(): void {
    const factor = this.#resident;
    this.#resident = null;
    if (factor === null || factor.kept !== null) return;
    const { order } = factor;
    const kept = new Float64Array((order * (order + 4)) / 2);
    let at = 0;
    for (const panel of this.#panels(order)) {
      kept.set(panel, at);
      at += panel.length;
    }
    factor.kept = kept;
  }

  /** What is made and read of the square: its panels of four rows, up to the diagonal (assembly/cholesky.ts). */
  #panels(order: number): Float64Array[] {
    const { place } = this;
    return Array.from({ length: order / 4 }, (_, k) =>
      place.view(place.square + 32 * order * k, 16 * (k + 1)),
    );
  }

  factorise(a: Float64Array, p: number): CholeskyFactor | null {
    const { place, code } = this;
    this.claim();
    const order = paddedColumns(p);
    this.#panels(order).forEach((panel, k) => {
      for (let row = 0; row < 4; row++) {
        const i = 4 * k + row;
        // rows after the last are those of the unit matrix
        for (let j = 0; j <= i; j++) panel[4 * j + row] = i < p ? a[i * p + j] : Number(j === i);
      }
    });
    if (code.cholesky(place.square, order) === 0) return null;
    const factor: ResidentFactor = { kept: null, order };
    this.#resident = factor;
    return { solve: (b) => this.#solve(factor, p, b) };
  }

  #solve(factor: ResidentFactor, p: number, b: Float64Array): Float64Array {
    const { place, code } = this;
    if (this.#resident !== factor && factor.kept !== null) {
      this.claim();
      let at = 0;
      for (const panel of this.#panels(factor.order)) {
        panel.set(factor.kept.subarray(at, at + panel.length));
        at += panel.length;
      }
      this.#resident = factor;
    }
    place.view(place.theta, factor.order).fill(0, p);
    place.write(place.theta, b);
    code.solve(place.square, factor.order, place.theta);
    return place.view(place.theta, p).slice();
  }

  factorAccumulator(columns: number): FactorAccumulator {
    const { place, code } = this;
    const triangle = new Float64Array((columns * (columns + 1)) / 2);
    return {
      append: (rows, rowCount) => {
        if (rowCount > FACTOR_BLOCK_ROWS) throw new RangeError(`${rowCount} rows in one block`);
        this.claim();
        place.write(place.square, triangle);
        const start = place.address(rows, 0, rowCount * columns, place.x);
        code.packRows(start, columns, rowCount, 0, place.packed, columns);
        code.foldIn(place.square, columns, place.packed, rowCount);
        triangle.set(place.view(place.square, triangle.length));
      },
      packed: () => withPositiveDiagonal(triangle, columns),
    };
  }
}

interface ResidentFactor {
  /** A copy of its panels, once something else went to the square. */
  kept: Float64Array | null;
  readonly order: number;
}
