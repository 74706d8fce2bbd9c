import { EigenvalueDecomposition, Matrix } from 'ml-matrix';
import { addScaled, allFinite, dot, scaled } from '../../numerics/vector.js';
import { symmetricTimes } from './matrix.js';

/** An eigenvalue of SᵀR this small beside the length of its column of R is rounding: no update along it. */
const EIGENVALUE_LEAST = 1e-8;
const LENGTH_LEAST = 1e-12;

/**
 * A quadratic model of the pooled curvature, learned from its products with directions: it begins as a diagonal and
 * takes symmetric updates of rank m (the block form of the symmetric rank-one update: Conn, Gould, Toint 1991). After
 * an update B S = Y; where the curvature is constant, all that was measured before stays exact. Row-major p × p.
 */
export class SketchModel {
  readonly matrix: Float64Array;

  constructor(diagonal: Float64Array, share: number) {
    const p = diagonal.length;
    this.matrix = new Float64Array(p * p);
    for (let j = 0; j < p; j++) this.matrix[j * p + j] = share * diagonal[j];
  }

  /** What the model leaves of the products: columns of Y − B S. */
  residuals(s: readonly Float64Array[], y: readonly Float64Array[]): Float64Array[] {
    return s.map((direction, k) => {
      const residual = Float64Array.from(y[k]);
      addScaled(residual, -1, symmetricTimes(this.matrix, direction));
      return residual;
    });
  }

  /**
   * B ← B + R W⁻¹ Rᵀ with R = Y − B S in the eigenvectors of SᵀR and W its eigenvalues. `diagonal` is the scale D in
   * which directions have unit length and residuals are measured. Products that are not finite change nothing.
   */
  learn(s: readonly Float64Array[], y: readonly Float64Array[], diagonal: Float64Array): void {
    const lengths = s.map((direction) => Math.sqrt(weightedSquare(direction, diagonal)));
    const kept = [...s.keys()].filter((k) => lengths[k] > 0);
    const unit = kept.map((k) => scaled(1 / lengths[k], s[k]));
    const products = kept.map((k) => scaled(1 / lengths[k], y[k]));
    if (kept.length === 0 || !products.every(allFinite)) return;
    const residuals = this.residuals(unit, products);
    const inverse = diagonal.map((d) => 1 / d);
    for (const { value, vector } of eigenpairs(unit, residuals)) {
      const column = combination(residuals, vector);
      const length = Math.sqrt(weightedSquare(column, inverse));
      if (Math.abs(value) > EIGENVALUE_LEAST * Math.max(length, LENGTH_LEAST))
        this.addOuter(column, 1 / value);
    }
  }

  /** B_ij ← r_i r_j B_ij: follows a diagonal that has changed by r². */
  rescale(ratio: Float64Array): void {
    const p = ratio.length;
    for (let i = 0; i < p; i++) for (let j = 0; j < p; j++) this.matrix[i * p + j] *= ratio[i] * ratio[j];
  }

  private addOuter(column: Float64Array, t: number): void {
    const p = column.length;
    for (let i = 0; i < p; i++) {
      const left = t * column[i];
      for (let j = 0; j < p; j++) this.matrix[i * p + j] += left * column[j];
    }
  }
}

/** Eigenvalues and eigenvectors of the symmetric part of SᵀR, m × m. */
function eigenpairs(
  s: readonly Float64Array[],
  r: readonly Float64Array[],
): { readonly value: number; readonly vector: number[] }[] {
  const products = s.map((left) => r.map((right) => dot(left, right)));
  const symmetric = new Matrix(products.map((row, i) => row.map((value, j) => (value + products[j][i]) / 2)));
  const { realEigenvalues, eigenvectorMatrix } = new EigenvalueDecomposition(symmetric, {
    assumeSymmetric: true,
  });
  return realEigenvalues.map((value, k) => ({ value, vector: eigenvectorMatrix.getColumn(k) }));
}

function combination(columns: readonly Float64Array[], weights: readonly number[]): Float64Array {
  const out = new Float64Array(columns[0].length);
  columns.forEach((column, k) => {
    addScaled(out, weights[k], column);
  });
  return out;
}

/** xᵀ D x. */
export function weightedSquare(x: Float64Array, diagonal: Float64Array): number {
  let sum = 0;
  for (let j = 0; j < x.length; j++) sum += diagonal[j] * x[j] * x[j];
  return sum;
}
