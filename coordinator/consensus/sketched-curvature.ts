import { dot, subtract } from '../../numerics/vector.js';
import { symmetricTimes } from './matrix.js';
import { definiteMetric, flooredDiagonal } from './metric.js';
import { SketchModel, weightedSquare } from './sketch-model.js';
import type { Standing } from './trial-points.js';

/** Share of the diagonal that the certificate credits to directions along which nothing was measured. */
const UNMEASURED_SHARE = 0.003;
/** Least eigenvalue, in the scale of the diagonal, where a model is not positive definite. */
const STEP_FLOOR = 0.01;
const CERTIFICATE_FLOOR = 1e-6;
/** A secant along which the gradient changed this many times more than the model tells comes from outside its region. */
const SURPRISE_MOST = 100;
/** Squared lengths of secants relative to z: below the first a difference of gradients is rounding. */
const SECANT_LEAST = 1e-16;
/** Above this one, curvature between the two points is not curvature at either: not for the certificate. */
const SECANT_NEAR = 0.1;
/** Most by which one round may rescale the models. */
const RESCALE_MOST = 3;

/**
 * What is known of the pooled curvature H from its diagonal, its products with directions, and differences of
 * gradients: a model B that proposes steps and a model C that certifies. Both take the same updates; B begins as diag H,
 * C credits next to nothing to what was not measured.
 */
export class SketchedCurvature {
  /** D, the floored diagonal that the models follow. */
  diagonal: Float64Array;
  /** Y − B S of the last sketch, before B learned it: where the model was wrong. */
  errors: readonly Float64Array[] = [];
  private readonly forStep: SketchModel;
  private readonly forCertificate: SketchModel;

  constructor(diagonal: Float64Array) {
    this.diagonal = flooredDiagonal(diagonal);
    this.forStep = new SketchModel(this.diagonal, 1);
    this.forCertificate = new SketchModel(this.diagonal, UNMEASURED_SHARE);
  }

  /** B, positive definite, row-major p × p. */
  stepMetric(): Float64Array {
    return definiteMetric(this.forStep.matrix, this.diagonal, STEP_FLOOR);
  }

  /** C, positive definite, row-major p × p. */
  certificateMetric(): Float64Array {
    return definiteMetric(this.forCertificate.matrix, this.diagonal, CERTIFICATE_FLOOR);
  }

  /** Products Y = H S measured at the point where the method now stands. */
  learnSketch(s: readonly Float64Array[], y: readonly Float64Array[]): void {
    if (s.length === 0) return;
    this.errors = this.forStep.residuals(s, y);
    this.forStep.learn(s, y, this.diagonal);
    this.forCertificate.learn(s, y, this.diagonal);
  }

  /**
   * The secant of gradients at two points; C learns only where F did not rise. A surprise by `metric`, B as it proposed
   * the step, teaches nothing; null where the method goes there all the same.
   */
  learnSecant(from: Standing, to: Standing, metric: Float64Array | null, noRise: boolean): void {
    if (!Number.isFinite(to.objective)) return;
    const s = subtract(to.z, from.z);
    const y = subtract(to.gradient, from.gradient);
    const size = weightedSquare(s, this.diagonal);
    const reach = weightedSquare(from.z, this.diagonal);
    const told = metric === null ? Number.POSITIVE_INFINITY : dot(s, symmetricTimes(metric, s));
    if (dot(s, y) > SURPRISE_MOST * told || size <= SECANT_LEAST * reach) return;
    this.forStep.learn([s], [y], this.diagonal);
    if (noRise && size <= SECANT_NEAR * reach) this.forCertificate.learn([s], [y], this.diagonal);
  }

  /** Rescales both models as the diagonal of H has changed. */
  follow(diagonal: Float64Array): void {
    const next = flooredDiagonal(diagonal);
    const ratio = next.map((value, j) =>
      Math.min(Math.max(Math.sqrt(value / this.diagonal[j]), 1 / RESCALE_MOST), RESCALE_MOST),
    );
    this.forStep.rescale(ratio);
    this.forCertificate.rescale(ratio);
    this.diagonal = this.diagonal.map((value, j) => value * ratio[j] * ratio[j]);
  }
}
