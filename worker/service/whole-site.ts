import { type Failure, fail } from '../../protocol/failure.js';
import type { FitSpecification } from '../../protocol/specification/types.js';

/** Why a worker with this share of the site's rows cannot take part; null where it can. */
export function checkWholeSite(
  { intercept }: Pick<FitSpecification, 'intercept'>,
  shard: { readonly index: number; readonly of: number },
): Failure | null {
  if (intercept !== 'per-site' || shard.of === 1) return null;
  return fail(
    'not-supported',
    `An intercept for each site needs all rows of the site in one worker; this one has shard ${shard.index} of ${shard.of}.`,
    { remedy: 'Join with the whole table, or use intercept: shared.' },
  ).failure;
}
