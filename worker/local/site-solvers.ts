import type { KernelVariant } from '../../numerics/kernels/kernel.js';
import { plainVariant } from '../../numerics/kernels/plain.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { aboutSiteMeans, scaleParts } from '../design/scale.js';
import type { RawShard } from '../design/shard.js';
import { lossOf } from '../losses/index.js';
import { type PartSolvers, partSolvers } from './part-solvers.js';

/** What a worker computes a run's answers with, once the pooled scaling is known. */
export interface SiteSolvers {
  readonly parts: PartSolvers;
  /** As used here: with an intercept of its own, about the site's own means. */
  readonly scaling: Scaling;
}

export function siteSolvers(
  spec: Pick<FitSpecification, 'intercept' | 'loss'>,
  raw: RawShard,
  pooled: Scaling,
  variant: KernelVariant = plainVariant,
): SiteSolvers {
  const ownIntercept = spec.intercept === 'per-site';
  const scaling = ownIntercept ? aboutSiteMeans(raw, pooled) : pooled;
  const shards = scaleParts(raw, scaling, spec.intercept !== 'none', variant);
  return { parts: partSolvers(shards, lossOf(spec.loss), ownIntercept), scaling };
}
