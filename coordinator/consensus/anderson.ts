import { CholeskyDecomposition, Matrix } from 'ml-matrix';
import { dot } from '../../numerics/vector.js';
import type { Application, Extrapolation, Iteration } from './acceleration.js';
import type { SiteMetric } from './site-metric.js';

/** Pairs kept. */
const MEMORY = 8;
/** Tikhonov weight on the unit columns of the least-squares problem. */
const TIKHONOV = 1e-10;

/** The step of the residual from one application to the next. */
interface Step {
  readonly vector: Float64Array;
  readonly length: number;
  /** Inner products with the steps before it that are kept, in their order, and with itself. */
  readonly products: number[];
}

/**
 * Anderson extrapolation, type II (Walker and Ni 2011): T − ΔT γ with γ = argmin ‖R − ΔR γ‖. A proposal adds one step
 * and its inner products, O(MEMORY) passes over K p numbers, and takes the memory of the oldest for the newest.
 */
export class Anderson implements Extrapolation {
  readonly growthMost = 1;
  /** Images T and residuals R are stacked (`SiteMetric.stack`). The images kept are one more than the steps. */
  private images: Float64Array[] = [];
  private steps: Step[] = [];
  private residual: Float64Array | null = null;

  rejected(): void {
    this.clear();
  }

  clear(): void {
    this.images = [];
    this.steps = [];
    this.residual = null;
  }

  propose({ metric }: Iteration, { image, step }: Application): Float64Array[] | null {
    const full = this.images.length > MEMORY;
    const residual = metric.stack(step, full ? this.steps[0].vector : undefined);
    const stacked = metric.stack(image, full ? this.images[0] : undefined);
    if (full) this.dropOldest();
    if (this.residual !== null) this.addStep(this.residual, residual);
    this.images.push(stacked);
    this.residual = residual;
    const weights = this.steps.length === 0 ? null : this.weights(residual);
    return weights === null ? null : this.extrapolated(metric, weights);
  }

  private dropOldest(): void {
    this.images.shift();
    this.steps.shift();
    for (const { products } of this.steps) products.shift();
  }

  /** The step from one residual to the next, in the place of the earlier one. */
  private addStep(earlier: Float64Array, later: Float64Array): void {
    const vector = earlier;
    for (let j = 0; j < vector.length; j++) vector[j] = later[j] - earlier[j];
    const square = dot(vector, vector);
    const products = [...this.steps.map((before) => dot(vector, before.vector)), square];
    this.steps.push({ vector, length: Math.max(Math.sqrt(square), 1e-150), products });
  }

  /** γ per unit of each step's own length, over that length; null where the least-squares problem has no solution. */
  private weights(residual: Float64Array): number[] | null {
    const { steps } = this;
    const gram = new Matrix(steps.length, steps.length);
    const right = new Matrix(steps.length, 1);
    for (const [a, { vector, length, products }] of steps.entries()) {
      for (const [b, product] of products.entries()) {
        const scaled = product / (length * steps[b].length);
        gram.set(a, b, scaled);
        gram.set(b, a, scaled);
      }
      gram.set(a, a, gram.get(a, a) + TIKHONOV);
      right.set(a, 0, dot(vector, residual) / length);
    }
    const decomposition = new CholeskyDecomposition(gram);
    if (!decomposition.isPositiveDefinite()) return null;
    const solved = decomposition.solve(right);
    return steps.map(({ length }, k) => solved.get(k, 0) / length);
  }

  /** T − ΔT γ, per site and out of the metric's scale. */
  private extrapolated({ scales, diagonal }: SiteMetric, weights: readonly number[]): Float64Array[] {
    const { images } = this;
    const p = diagonal.length;
    return scales.map((scale, i) => {
      const from = i * p;
      const own = images[weights.length].slice(from, from + p);
      for (const [k, weight] of weights.entries())
        subtractDifference(own, weight, images[k + 1], images[k], from);
      for (let j = 0; j < p; j++) own[j] /= Math.sqrt(scale * diagonal[j]);
      return own;
    });
  }
}

/** y ← y − t (later − earlier), of these the part from `from` on. */
function subtractDifference(
  y: Float64Array,
  t: number,
  later: Float64Array,
  earlier: Float64Array,
  from: number,
): void {
  for (let j = 0; j < y.length; j++) y[j] -= t * (later[from + j] - earlier[from + j]);
}
