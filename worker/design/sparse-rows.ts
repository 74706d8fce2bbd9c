import type { Kernel, PassPoint, PassValue, RowLoss, RowState } from '../../numerics/kernels/kernel.js';
import { dot } from '../../numerics/vector.js';
import { placedEntries } from './entries.js';
import type { DesignRows, Occupied, RowData } from './rows.js';
import { type SparseColumns, sparseColumns } from './sparse-columns.js';
import { sparseCrossProducts, sparseGram } from './sparse-products.js';

const NONE = new Float64Array(0);

type Spare = RowState & { readonly offset: Float64Array };

/**
 * Rows by their entries, `rowCount` of them from row `first` on; after the last row comes the first one again, so that
 * a ring of rows holds no entry twice. Only `copy` fills in zeros; any other sum costs p numbers beside the entries.
 */
export class SparseRows implements DesignRows {
  readonly sparse = true;
  readonly p: number;
  private made: Spare | null = null;

  constructor(
    private readonly of: SparseColumns,
    private readonly first: number,
    readonly rowCount: number,
    readonly kernel: Kernel,
  ) {
    this.p = of.p;
  }

  products(from: number, to: number, theta: Float64Array, out: Float64Array): void {
    const { entries, shift } = this.of;
    const { starts, columns, values } = entries;
    const shifted = dot(shift, theta);
    for (let r = from; r < to; r++) {
      const row = this.rowOf(r);
      const end = starts[row + 1];
      let sum = 0;
      for (let e = starts[row]; e < end; e++) sum += values[e] * theta[columns[e]];
      out[r - from] = sum - shifted;
    }
  }

  addWeighted(from: number, to: number, weights: Float64Array, out: Float64Array): void {
    const { entries, shift, p } = this.of;
    const { starts, columns, values } = entries;
    let total = 0;
    for (let r = from; r < to; r++) {
      const weight = weights[r - from];
      if (weight === 0) continue;
      total += weight;
      const row = this.rowOf(r);
      const end = starts[row + 1];
      for (let e = starts[row]; e < end; e++) out[columns[e]] += weight * values[e];
    }
    if (total !== 0) for (let j = 0; j < p; j++) out[j] -= total * shift[j];
  }

  /** Σ w (v − s)² over the entries, and w s² for every row without one. */
  addWeightedSquares(from: number, to: number, weights: Float64Array, out: Float64Array): void {
    const { entries, shift, p } = this.of;
    const { starts, columns, values } = entries;
    const sums = new Float64Array(p);
    let total = 0;
    for (let r = from; r < to; r++) {
      const weight = weights[r - from];
      total += weight;
      const row = this.rowOf(r);
      const end = starts[row + 1];
      for (let e = starts[row]; e < end; e++)
        sums[columns[e]] += weight * values[e] * (values[e] - 2 * shift[columns[e]]);
    }
    // rounding may leave less than nothing of a column that is in almost every row
    for (let j = 0; j < p; j++) out[j] += Math.max(0, sums[j] + total * shift[j] * shift[j]);
  }

  gram(weights: Float64Array | null, factor: number): Float64Array {
    return sparseGram(this.of, this.rowNumbers(), weights, factor);
  }

  crossProducts(inverse: Float64Array): Float64Array {
    return sparseCrossProducts(this.of, this.rowNumbers(), inverse);
  }

  /** The kernel's pass over rows of no column, whose offsets are the products. */
  passes(data: RowData, loss: RowLoss, points: readonly PassPoint[]): PassValue[] {
    const { rowCount, spare } = this;
    return points.map(({ theta, state, gradient }) => {
      this.products(0, rowCount, theta, spare.offset);
      const { offset } = data;
      if (offset !== null) for (let r = 0; r < rowCount; r++) spare.offset[r] += offset[r];
      const rows = { ...data, rowCount, p: 0, x: NONE, offset: spare.offset };
      const own = state ?? spare;
      const point = { theta: NONE, state: own, gradient: gradient === null ? null : NONE };
      const [value] = this.kernel.passes(rows, loss, [point]);
      if (gradient !== null) {
        gradient.fill(0);
        this.addWeighted(0, rowCount, own.slopes, gradient);
      }
      return value;
    });
  }

  copy(from: number, to: number, out: Float64Array): void {
    const { entries, shift, p } = this.of;
    const { starts, columns, values } = entries;
    for (let r = from, at = 0; r < to; r++, at += p) {
      for (let j = 0; j < p; j++) out[at + j] = -shift[j];
      const row = this.rowOf(r);
      for (let e = starts[row]; e < starts[row + 1]; e++) out[at + columns[e]] += values[e];
    }
  }

  stretch(from: number, to: number): SparseRows {
    return new SparseRows(this.of, this.rowOf(from), to - from, this.kernel);
  }

  columns(kept: readonly number[]): SparseRows {
    const { entries, shift, p, lead } = this.of;
    const placeOf = new Int32Array(p).fill(-1);
    kept.forEach((j, place) => {
      placeOf[j] = place;
    });
    const of = sparseColumns(
      placedEntries(entries, placeOf, null),
      Float64Array.from(kept, (j) => shift[j]),
      lead > 0 && kept[0] === 0 ? 1 : 0,
    );
    return new SparseRows(of, this.first, this.rowCount, this.kernel);
  }

  occupied(): Occupied | null {
    const occupation = this.of.occupation();
    if (occupation === null) return null;
    const { inner, ...others } = occupation;
    return { ...others, rows: new SparseRows(inner, this.first, this.rowCount, this.kernel) };
  }

  /** Numbers of the rows in the making of a pass, made once. */
  private get spare(): Spare {
    const { rowCount } = this;
    this.made ??= {
      offset: new Float64Array(rowCount),
      eta: new Float64Array(rowCount),
      slopes: new Float64Array(rowCount),
    };
    return this.made;
  }

  private rowOf(r: number): number {
    const at = this.first + r;
    const { rowCount } = this.of.entries;
    return at < rowCount ? at : at - rowCount;
  }

  private rowNumbers(): Int32Array {
    return Int32Array.from({ length: this.rowCount }, (_, r) => this.rowOf(r));
  }
}
