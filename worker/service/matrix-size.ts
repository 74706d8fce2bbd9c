import { type Failure, fail } from '../../protocol/failure.js';
import type { Work } from '../../protocol/messages/round.js';
import { curvatureMatricesOf } from '../../protocol/numbers.js';

/** Most solver columns of a matrix that leaves: one of more has no room in a frame. */
const COLUMNS_MOST = 5000;

/** Why these works cannot be done on so many solver columns; null where they can. `columns` null: not known yet. */
export function checkMatrices(works: readonly Work[], columns: number | null): Failure | null {
  if (columns === null || columns <= COLUMNS_MOST) return null;
  if (works.every((work) => curvatureMatricesOf(work) === 0)) return null;
  return fail(
    'not-supported',
    `A matrix of ${columns} × ${columns} columns was asked; a site answers such of ${COLUMNS_MOST} columns at most.`,
    {
      remedy:
        'Fit on the rung `sketched` or `proximal` (rounds.rung), and leave out reports that rest on curvature.',
    },
  ).failure;
}
