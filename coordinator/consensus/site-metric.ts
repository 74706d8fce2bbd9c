import type { Penalty } from '../../numerics/penalty.js';
import { scaled } from '../../numerics/vector.js';
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
    const { diagonal } = this;
    for (const [i, own] of s.entries()) {
      const scale = this.scales[i];
      for (let j = 0; j < b.length; j++) b[j] += scale * diagonal[j] * own[j];
    }
    return zStepDiagonal(g, scaled(total, diagonal), b);
  }

  /** v_i = z − u_i, where u_i = s_i − z. */
  centers(s: readonly Float64Array[], z: Float64Array): Float64Array[] {
    return s.map((own) => {
      const center = new Float64Array(z.length);
      for (let j = 0; j < center.length; j++) center[j] = 2 * z[j] - own[j];
      return center;
    });
  }

  /** ∇φ_i(x_i) = M_i (v_i − x_i): a proximal point brings its gradient. */
  gradients(centers: readonly Float64Array[], x: readonly Float64Array[]): Float64Array[] {
    const { diagonal } = this;
    return x.map((own, i) => {
      const scale = this.scales[i];
      const center = centers[i];
      const slope = new Float64Array(own.length);
      for (let j = 0; j < slope.length; j++) slope[j] = scale * diagonal[j] * (center[j] - own[j]);
      return slope;
    });
  }

  /** s_i = z − M_i⁻¹ y_i: the point of the iteration at which z has the duals M_i u_i = −y_i. */
  withDuals(z: Float64Array, y: readonly Float64Array[]): Float64Array[] {
    const { diagonal } = this;
    return y.map((own, i) => {
      const scale = this.scales[i];
      const s = new Float64Array(z.length);
      for (let j = 0; j < s.length; j++) s[j] = z[j] - own[j] / (scale * diagonal[j]);
      return s;
    });
  }

  /** All sites' vectors end to end, scaled by √M_i: plain inner products are those of the metric. */
  stack(
    vectors: readonly Float64Array[],
    out: Float64Array = new Float64Array(vectors.length * this.diagonal.length),
  ): Float64Array {
    const { diagonal } = this;
    const p = diagonal.length;
    for (const [i, own] of vectors.entries()) {
      const scale = this.scales[i];
      const from = i * p;
      for (let j = 0; j < p; j++) out[from + j] = Math.sqrt(scale * diagonal[j]) * own[j];
    }
    return out;
  }

  /** The norm of all sites' vectors in the metric. */
  norm(vectors: readonly Float64Array[]): number {
    const { diagonal } = this;
    let square = 0;
    for (const [i, own] of vectors.entries()) {
      const scale = this.scales[i];
      for (let j = 0; j < own.length; j++) {
        const weighted = Math.sqrt(scale * diagonal[j]) * own[j];
        square += weighted * weighted;
      }
    }
    return Math.sqrt(square);
  }
}
