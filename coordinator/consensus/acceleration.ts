import { CholeskyDecomposition, Matrix } from 'ml-matrix';
import { dot, norm, subtract } from '../../numerics/vector.js';

/** Pairs kept for the extrapolation. */
const MEMORY = 8;
/** Tikhonov weight on the unit columns of the least-squares problem. */
const TIKHONOV = 1e-10;
/** Iterations within which the residual must halve, and the strikes after which acceleration stays off. */
const HALVING_WITHIN = 30;
const STRIKES_MOST = 3;

/**
 * Anderson acceleration (type II) of the fixed-point map s ↦ T(s) = s + R(s) (Walker and Ni 2011), with the safeguard
 * of Fu, Zhang, Boyd 2020 in its simplest form: an accelerated point whose residual is above that of the last accepted
 * point is thrown away for the stored plain image T. Vectors are the sites' stacked and already scaled by the square
 * root of the metric, so that plain inner products are those of the metric.
 */
export class Acceleration {
  private residuals: Float64Array[] = [];
  private images: Float64Array[] = [];
  private accepted: { readonly size: number; readonly image: Float64Array } | null = null;
  private extrapolated = false;
  private strikes = 0;
  private halving: { readonly since: number; readonly size: number } | null = null;
  private iteration = 0;

  /** Forgets all pairs: the map has changed (another metric) or the iteration jumped. */
  clear(): void {
    this.residuals = [];
    this.images = [];
    this.accepted = null;
    this.extrapolated = false;
  }

  /** The next s from the image T and residual R of the current one. */
  next(image: Float64Array, residual: Float64Array): Float64Array {
    this.iteration++;
    const size = norm(residual);
    if (this.extrapolated && this.accepted !== null && !(size <= this.accepted.size)) {
      const { image: stored } = this.accepted;
      this.residuals = [];
      this.images = [];
      this.extrapolated = false;
      return stored;
    }
    this.accepted = { size, image };
    this.watchProgress(size);
    this.residuals.push(residual);
    this.images.push(image);
    if (this.residuals.length > MEMORY + 1) {
      this.residuals.shift();
      this.images.shift();
    }
    this.extrapolated = this.strikes < STRIKES_MOST && this.residuals.length >= 2;
    return this.extrapolated ? extrapolate(this.images, this.residuals) : image;
  }

  private watchProgress(size: number): void {
    if (this.halving === null || size < 0.5 * this.halving.size) {
      this.halving = { since: this.iteration, size };
    } else if (this.strikes < STRIKES_MOST && this.iteration - this.halving.since > HALVING_WITHIN) {
      this.strikes++;
      this.halving = { since: this.iteration, size };
      this.residuals = [];
      this.images = [];
    }
  }
}

/** T − ΔT γ with γ = argmin ‖R − ΔR γ‖, on unit columns with a Tikhonov term. */
function extrapolate(images: readonly Float64Array[], residuals: readonly Float64Array[]): Float64Array {
  const m = residuals.length - 1;
  const last = residuals[m];
  const steps = Array.from({ length: m }, (_, k) => subtract(residuals[k + 1], residuals[k]));
  const lengths = steps.map((step) => Math.max(norm(step), 1e-150));
  const gram = new Matrix(m, m);
  const right = new Matrix(m, 1);
  for (let a = 0; a < m; a++) {
    for (let b = 0; b < m; b++) gram.set(a, b, dot(steps[a], steps[b]) / (lengths[a] * lengths[b]));
    gram.set(a, a, gram.get(a, a) + TIKHONOV);
    right.set(a, 0, dot(steps[a], last) / lengths[a]);
  }
  const decomposition = new CholeskyDecomposition(gram);
  if (!decomposition.isPositiveDefinite()) return images[m];
  const weights = decomposition.solve(right);
  const next = Float64Array.from(images[m]);
  for (let k = 0; k < m; k++) {
    const weight = weights.get(k, 0) / lengths[k];
    const later = images[k + 1];
    const earlier = images[k];
    for (let j = 0; j < next.length; j++) next[j] -= weight * (later[j] - earlier[j]);
  }
  return next;
}
