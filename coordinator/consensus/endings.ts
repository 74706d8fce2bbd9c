import { penaltyValue } from '../../numerics/penalty.js';
import type { MethodEnd, Progress, Rung } from './method.js';
import type { ConsensusProblem } from './problem.js';
import type { Standing } from './trial-points.js';

type Rest = Omit<MethodEnd, 'z' | 'loss' | 'penalty' | 'columnsAtFault'> & {
  readonly columnsAtFault?: readonly number[];
};

/** The end of a method that stands by a point; with no columns named, none is at fault. */
export const endAt = (
  { penalty }: Pick<ConsensusProblem, 'penalty'>,
  { z, loss }: Pick<Standing, 'z' | 'loss'>,
  rest: Rest,
): MethodEnd => ({ columnsAtFault: [], ...rest, z, loss, penalty: penaltyValue(penalty, z) });

/** Progress of a second-order method, which has no residuals: where it stands (null: nowhere yet), and its gap. */
export const progressAt = (
  rung: Rung,
  here: Pick<Standing, 'objective'> | null,
  relativeGap: number | null,
  gapMeasured: boolean,
  purpose: string,
): Progress => ({
  rung,
  purpose,
  primalResidual: null,
  dualResidual: null,
  relativeGap,
  gapMeasured,
  objective: here?.objective ?? null,
});
