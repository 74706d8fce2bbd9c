import type { Penalty } from '../../numerics/penalty.js';
import { zStepDiagonal } from '../../numerics/z-step.js';

/** The sites' metrics M_i = scales[i] · diag(diagonal), and what consensus ADMM computes with them. K sites, p columns. */
export class SiteMetric {
  constructor(
    readonly scales: readonly number[],
    readonly diagonal: Float64Array,
  ) {}

  /** All metrics multiplied by a factor. */
  times(factor: number): SiteMetric {
    return new SiteMetric(
      this.scales.map((scale) => factor * scale),
      this.diagonal,
    );
  }

  /** The consensus step: z = argmin g(z) + ½ zᵀ(Σ M_i)z − (Σ M_i s_i)ᵀz. */
  consensus(g: Penalty, s: readonly Float64Array[]): Float64Array {
    const total = this.scales.reduce((sum, scale) => sum + scale, 0);
    const b = new Float64Array(this.diagonal.length);
    s.forEach((own, i) => {
      for (let j = 0; j < b.length; j++) b[j] += this.scales[i] * this.diagonal[j] * own[j];
    });
    return zStepDiagonal(
      g,
      this.diagonal.map((value) => total * value),
      b,
    );
  }

  /** v_i = z − u_i, where u_i = s_i − z. */
  centers(s: readonly Float64Array[], z: Float64Array): Float64Array[] {
    return s.map((own) => own.map((value, j) => 2 * z[j] - value));
  }

  /** ∇φ_i(x_i) = M_i (v_i − x_i): a proximal point brings its gradient. */
  gradients(centers: readonly Float64Array[], x: readonly Float64Array[]): Float64Array[] {
    return x.map((own, i) =>
      own.map((value, j) => this.scales[i] * this.diagonal[j] * (centers[i][j] - value)),
    );
  }

  /** s_i = z − M_i⁻¹ y_i: the point of the iteration at which z has the duals M_i u_i = −y_i. */
  withDuals(z: Float64Array, y: readonly Float64Array[]): Float64Array[] {
    return y.map((own, i) => z.map((value, j) => value - own[j] / (this.scales[i] * this.diagonal[j])));
  }

  /** All sites' vectors end to end, scaled by √M_i: plain inner products are those of the metric. */
  stack(vectors: readonly Float64Array[]): Float64Array {
    const p = this.diagonal.length;
    const out = new Float64Array(vectors.length * p);
    vectors.forEach((own, i) => {
      for (let j = 0; j < p; j++) out[i * p + j] = Math.sqrt(this.scales[i] * this.diagonal[j]) * own[j];
    });
    return out;
  }

  unstack(stacked: Float64Array): Float64Array[] {
    const p = this.diagonal.length;
    return this.scales.map((scale, i) =>
      this.diagonal.map((value, j) => stacked[i * p + j] / Math.sqrt(scale * value)),
    );
  }
}
