import { packSymmetric, unpackSymmetric } from '../../numerics/packed.js';
import { penaltyValue } from '../../numerics/penalty.js';
import { addScaled, dot, maxOf, plusScaled, subtract } from '../../numerics/vector.js';
import { type ModelStep, modelStep } from './certificate.js';
import type { SiteQuadratic } from './late-method.js';
import { symmetricTimes } from './matrix.js';
import { definiteMetric, diagonalOf, flooredDiagonal, plusDiagonal } from './metric.js';
import type { ConsensusProblem } from './problem.js';
import { addSecant } from './site-models.js';

/** Weight of the pull to z₀ while sites are unheard, per share of the rows they hold, in D. */
const ANCHOR = 1e-4;
/** Where curvature may vanish: weight, in the largest entry of D, of the term that holds a joint solution near its start. */
const HOLD = 1e-4;

/** φ_i as its newest answer shows it: the quadratic at the point where it was taken. Curvature row-major p × p. */
export interface SiteModel {
  readonly point: Float64Array;
  readonly value: number;
  readonly gradient: Float64Array;
  readonly curvature: Float64Array;
  /** Whether the curvature was measured at the point; else it is an older one, corrected by secants. */
  readonly measured: boolean;
}

export const siteModel = (point: Float64Array, { value, gradient, curvature }: SiteQuadratic): SiteModel => ({
  point,
  value,
  gradient,
  curvature: unpackSymmetric(curvature),
  measured: true,
});

/** q(z) = φ + ∇φᵀd + ½ dᵀHd, d = z − point. */
export function modelValue({ point, value, gradient, curvature }: SiteModel, z: Float64Array): number {
  const d = subtract(z, point);
  return value + dot(gradient, d) + 0.5 * dot(d, symmetricTimes(curvature, d));
}

/**
 * The last quadratic of every site, and their sum
 *
 *     m(z) = s Σ_heard q_i(z) + ½ · 1e-4 · (unheard share) · ‖z − z₀‖²_D,    s = 1 / Σ_heard w_i :
 *
 * the mean of the others stands in for a site not heard yet, and a weak pull to z₀ keeps what they leave undetermined
 * from running away.
 */
export class LateModels {
  private readonly last: (SiteModel | null)[];
  /** D: floored diagonal of the first sum of curvatures. */
  private diagonal: Float64Array | null = null;

  constructor(private readonly problem: ConsensusProblem) {
    this.last = problem.siteWeights.map(() => null);
  }

  of(site: number): SiteModel | null {
    return this.last[site];
  }

  learn(site: number, model: SiteModel): void {
    this.last[site] = model;
  }

  /**
   * The model at a new point where only φ and ∇φ were asked: the curvature known so far and one secant. Null where none
   * is known.
   */
  bySecant(site: number, point: Float64Array, value: number, gradient: Float64Array): SiteModel | null {
    const old = this.last[site];
    if (old === null) return null;
    const curvature = Float64Array.from(old.curvature);
    const step = subtract(point, old.point);
    const diagonal = this.startDiagonal();
    const yardstick = dot(
      step,
      step.map((value, j) => this.problem.siteWeights[site] * diagonal[j] * value),
    );
    addSecant(curvature, step, subtract(gradient, old.gradient), yardstick);
    return { point, value, gradient, curvature, measured: false };
  }

  /** In roster order; null while one is missing. */
  all(): readonly SiteModel[] | null {
    const present = this.last.filter((model) => model !== null);
    return present.length === this.last.length ? present : null;
  }

  unheard(): number[] {
    return [...this.last.keys()].filter((i) => this.last[i] === null);
  }

  /** D. At least one site has been heard. */
  startDiagonal(): Float64Array {
    this.diagonal ??= flooredDiagonal(diagonalOf(this.sum(null).curvature, this.problem.p));
    return this.diagonal;
  }

  /** m(z) + g(z). */
  value(z: Float64Array): number {
    const { scale, anchor } = this.shares(null);
    let sum = 0;
    for (const model of this.last) if (model !== null) sum += scale * modelValue(model, z);
    const { start, penalty } = this.problem;
    if (anchor > 0) {
      const diagonal = this.startDiagonal();
      for (let j = 0; j < z.length; j++) sum += 0.5 * anchor * diagonal[j] * (z[j] - start[j]) ** 2;
    }
    return sum + penaltyValue(penalty, z);
  }

  /**
   * The minimiser of m + g, from z, where `damping` · D is added to the metric. Where curvature may vanish, a column has
   * lost it rather than never had it: columns of unit spread are damped alike. Null where it cannot be computed.
   */
  step(z: Float64Array, damping = 0): ModelStep | null {
    const { metric, gradient } = this.quadraticAt(z, null);
    if (damping === 0) return modelStep(this.problem.penalty, metric, gradient, z);
    const diagonal = this.problem.curvatureMayVanish ? this.alike() : this.startDiagonal();
    return modelStep(this.problem.penalty, plusDiagonal(metric, damping, diagonal), gradient, z);
  }

  private alike(): Float64Array {
    const diagonal = this.startDiagonal();
    const most = maxOf(diagonal);
    return diagonal.map(() => most);
  }

  /** How far a step moves the linear predictor (root mean square), by D. */
  moved(direction: Float64Array): number {
    const diagonal = this.startDiagonal();
    let total = 0;
    let bend = 0;
    for (let j = 0; j < direction.length; j++) {
      total += diagonal[j];
      bend += diagonal[j] * direction[j] * direction[j];
    }
    return Math.sqrt((bend * direction.length) / total);
  }

  /** The others as one site's joint problem sees them: ½ xᵀBx − cᵀx, B packed, made positive definite at z. */
  others(site: number, z: Float64Array): { readonly curvature: Float64Array; readonly linear: Float64Array } {
    const { metric, gradient } = this.quadraticAt(z, site);
    const held = this.problem.curvatureMayVanish ? plusDiagonal(metric, HOLD, this.alike()) : metric;
    const linear = plusScaled(symmetricTimes(held, z), -1, gradient);
    return { curvature: packSymmetric(held, this.problem.p), linear };
  }

  private quadraticAt(z: Float64Array, without: number | null) {
    const { curvature, linear } = this.sum(without);
    const { anchor } = this.shares(without);
    if (anchor > 0) {
      const diagonal = this.startDiagonal();
      for (let j = 0; j < z.length; j++) {
        curvature[j * z.length + j] += anchor * diagonal[j];
        linear[j] += anchor * diagonal[j] * this.problem.start[j];
      }
    }
    const gradient = plusScaled(symmetricTimes(curvature, z), -1, linear);
    const floor = flooredDiagonal(diagonalOf(curvature, z.length));
    return { metric: definiteMetric(curvature, floor), gradient };
  }

  /** s Σ H_i and s Σ (H_i x_i − ∇φ_i(x_i)) over the sites heard, but one. */
  private sum(without: number | null) {
    const { p } = this.problem;
    const { scale } = this.shares(without);
    const curvature = new Float64Array(p * p);
    const linear = new Float64Array(p);
    this.last.forEach((model, i) => {
      if (model === null || i === without) return;
      addScaled(curvature, scale, model.curvature);
      addScaled(linear, scale, symmetricTimes(model.curvature, model.point));
      addScaled(linear, -scale, model.gradient);
    });
    return { curvature, linear };
  }

  /** s, and the weight of the pull to z₀; with all sites heard 1 and 0. */
  private shares(without: number | null): { readonly scale: number; readonly anchor: number } {
    const { siteWeights } = this.problem;
    let heard = 0;
    let unheard = 0;
    siteWeights.forEach((weight, i) => {
      if (i === without) return;
      if (this.last[i] === null) unheard += weight;
      else heard += weight;
    });
    return unheard === 0
      ? { scale: 1, anchor: 0 }
      : { scale: (heard + unheard) / heard, anchor: ANCHOR * unheard };
  }
}
