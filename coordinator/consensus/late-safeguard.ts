import { plusScaled } from '../../numerics/vector.js';
import type { ModelStep } from './certificate.js';
import { Damping } from './damping.js';
import { type LateModels, modelValue } from './late-models.js';
import type { LatePoint } from './late-points.js';
import type { Taken } from './late-replies.js';
import type { ConsensusProblem } from './problem.js';
import type { Iterate } from './trial-points.js';

/** Share of the decrease promised that must be left. */
const SUFFICIENT = 1e-4;
/** Relative size of what counts as rounding in a model's value. */
const ROUNDING = 1e-11;

/**
 * Where to, if the step to the candidate is to be cut: the answers there eat up the decrease promised from where it
 * came, or lift the sum above the best F measured. Models centred elsewhere than where the step began say nothing of
 * the first. `models` do not hold the new answers yet.
 */
export function overshot(
  candidate: LatePoint,
  models: LateModels,
  best: Iterate | null,
  taken: readonly Taken[],
): Float64Array | null {
  const { z, from } = candidate;
  let near: number | null = null;
  let all: number | null = null;
  for (const { site, about, model, joint } of taken) {
    const old = models.of(site);
    if (joint || about !== candidate || old === null) continue;
    const surprise = model.value - modelValue(old, z);
    all = (all ?? 0) + surprise;
    if (from !== null && old.point === from.z) near = (near ?? 0) + surprise;
  }
  if (all === null || from === null) return null;
  const foretold = models.value(z);
  const slack = ROUNDING * Math.abs(foretold);
  if (near !== null && !(near <= (1 - SUFFICIENT) * from.promised + slack)) return from.z;
  const heardAll = models.unheard().length === 0;
  return best !== null && heardAll && !(foretold + all <= best.objective + slack) ? best.z : null;
}

/** How far a first step may move the linear predictor, and how that grows and shrinks. */
const RADIUS_FIRST = 4;
const RADIUS_GROWTH = 2;
const RADIUS_SHRINKAGE = 4;

/**
 * How far the models are trusted: on a scale of the linear predictor where the loss may grow exponentially along it, and,
 * where curvature may vanish, by damping.
 */
export class LateTrust {
  private radius = RADIUS_FIRST;
  private readonly damping = new Damping();

  constructor(private readonly problem: ConsensusProblem) {}

  succeeded(): void {
    this.radius *= RADIUS_GROWTH;
    this.damping.succeeded();
  }

  failed(): void {
    this.radius /= RADIUS_SHRINKAGE;
    this.damping.failed();
  }

  /** The step of the models, as far as they are trusted. Its decrement is that of the whole step. */
  step(models: LateModels, z: Float64Array): ModelStep | null {
    if (this.problem.curvatureMayVanish) return models.step(z, this.damping.amount);
    const whole = models.step(z);
    if (whole === null) return null;
    const share = this.radius / models.moved(whole.direction);
    return share >= 1 ? whole : { ...whole, z: plusScaled(z, share, whole.direction) };
  }
}
