import { plusScaled } from '../../numerics/vector.js';
import type { SiteMetric } from './site-metric.js';

/** Over-relaxation α (Eckstein and Bertsekas 1992). */
const RELAXATION = 1.6;
/** Iterations within which the residual must halve, and the strikes after which acceleration stays off. */
const HALVING_WITHIN = 30;
const STRIKES_MOST = 3;

/** One iteration's vectors per site, in roster order: s and z before it, the centres asked, the proximal points answered. */
export interface Iteration {
  readonly metric: SiteMetric;
  readonly s: readonly Float64Array[];
  readonly z: Float64Array;
  readonly centers: readonly Float64Array[];
  readonly x: readonly Float64Array[];
}

/** The image T = s + R of the fixed-point map and the step R to it, per site; the step is good until the next one. */
export interface Application {
  readonly image: readonly Float64Array[];
  readonly step: readonly Float64Array[];
}

/** Something that guesses a point nearer to the fixed point than the image is. */
export interface Extrapolation {
  /** How many times the last accepted residual a proposal's may be. */
  readonly growthMost: number;
  /** The next s, per site, or null where it has no guess. */
  propose(iteration: Iteration, application: Application): Float64Array[] | null;
  /** Its last guess was thrown away. */
  rejected(): void;
  /** Forgets what it knows of the map, which has changed. */
  clear(): void;
}

/**
 * s_i ← s_i + α (x_i − z), with an extrapolation under a safeguard (after Fu, Zhang, Boyd 2020): a proposed point whose
 * residual has grown is thrown away for the stored plain image T; where the residual does not halve in thirty
 * iterations it is a strike, and after three strikes only plain images are taken: relaxed consensus ADMM with a fixed
 * metric, which converges.
 */
export class Acceleration {
  private accepted: { readonly size: number; readonly image: readonly Float64Array[] } | null = null;
  private proposed = false;
  private strikes = 0;
  private halving: { readonly since: number; readonly size: number } | null = null;
  private iterations = 0;
  /** Where the step of an iteration is kept, per site. */
  private step: Float64Array[] | null = null;
  /** Proposals thrown away. */
  rejections = 0;

  constructor(private readonly extrapolation: Extrapolation) {}

  /** The map has changed (another metric), or the iteration jumped. */
  clear(): void {
    this.extrapolation.clear();
    this.accepted = null;
    this.proposed = false;
  }

  /** The next s. */
  next(iteration: Iteration): readonly Float64Array[] {
    this.iterations++;
    const { metric, s, x, z } = iteration;
    this.step ??= x.map((own) => new Float64Array(own.length));
    const { step } = this;
    for (const [i, own] of x.entries()) relaxedStep(own, z, step[i]);
    const image = s.map((own, i) => plusScaled(own, 1, step[i]));
    const size = metric.norm(step);
    const proposal = this.extrapolation.propose(iteration, { image, step });
    if (
      this.proposed &&
      this.accepted !== null &&
      !(size <= this.extrapolation.growthMost * this.accepted.size)
    ) {
      this.proposed = false;
      this.rejections++;
      this.extrapolation.rejected();
      return this.accepted.image;
    }
    this.accepted = { size, image };
    this.watchProgress(size);
    this.proposed = this.strikes < STRIKES_MOST && proposal !== null;
    return this.proposed && proposal !== null ? proposal : image;
  }

  private watchProgress(size: number): void {
    if (this.halving === null || size < 0.5 * this.halving.size) {
      this.halving = { since: this.iterations, size };
    } else if (this.strikes < STRIKES_MOST && this.iterations - this.halving.since > HALVING_WITHIN) {
      this.strikes++;
      this.halving = { since: this.iterations, size };
      this.extrapolation.clear();
    }
  }
}

/** α (x − z). */
function relaxedStep(x: Float64Array, z: Float64Array, out: Float64Array): void {
  for (let j = 0; j < out.length; j++) out[j] = RELAXATION * (x[j] - z[j]);
}
