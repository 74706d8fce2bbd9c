import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Part } from '../../protocol/messages/part.js';
import type { Shard } from '../design/shard.js';
import type { Loss } from '../losses/loss.js';
import { type LocalSolver, localSolver } from './local-solver.js';
import { heldOutValue, ownInterceptSolver } from './own-intercept.js';

/** The local solvers of a shard: of all rows, and of the rows in and outside each fold, each made once. */
export interface PartSolvers {
  /** All rows, as `scaleParts` makes them. */
  readonly whole: Shard;
  readonly loss: Loss;
  /** True where the first column of `whole` is the intercept of this site's own, no coefficient of the run. */
  readonly ownIntercept: boolean;
  solver(part: Part): LocalSolver;
  /** Packed triangular factors of √(w/N) · [X, y − offset]: of the rows in each fold, or of all rows where none is named. */
  factors(folds: readonly string[]): Checked<Float64Array[]>;
}

export function partSolvers(shardOf: (part: Part) => Shard, loss: Loss, ownIntercept: boolean): PartSolvers {
  const made = new Map<string, LocalSolver>();
  const make = (part: Part): LocalSolver => {
    const shard = shardOf(part);
    if (!ownIntercept) return localSolver(shard, loss);
    return part?.side === 'held-out'
      ? heldOutSolver(shardOf({ ...part, side: 'training' }), shard, loss)
      : ownInterceptSolver(shard, loss);
  };
  const solver = (part: Part): LocalSolver => {
    const key = part === null ? '' : `${part.side} ${part.fold}`;
    const found = made.get(key) ?? make(part);
    made.set(key, found);
    return found;
  };
  return {
    whole: shardOf(null),
    loss,
    ownIntercept,
    solver,
    factors: (folds) => {
      if (folds.length > 0 && ownIntercept) return NO_FOLD_FACTORS;
      const parts: Part[] = folds.length === 0 ? [null] : folds.map((fold) => ({ fold, side: 'held-out' }));
      const factors: Float64Array[] = [];
      for (const part of parts) {
        const factor = solver(part).factor();
        if (!factor.ok) return factor;
        factors.push(factor.value);
      }
      return succeed(factors);
    },
  };
}

const NO_FOLD_FACTORS = fail(
  'not-supported',
  'With an intercept of its own a site has no triangular factors by fold: each training set has another intercept.',
  { remedy: 'Choose the rung `curvature` (rounds.rung).' },
);

/** Held out, rows have the intercept of the training rows: they have values, and no fit of their own. */
function heldOutSolver(training: Shard, heldOut: Shard, loss: Loss): LocalSolver {
  const valueOnly = fail(
    'not-supported',
    'With an intercept of its own a site tells of rows held out nothing but what they lose.',
    { remedy: 'Ask for values alone.' },
  );
  const evaluate: LocalSolver['evaluate'] = (point, want) =>
    want === 'value' ? heldOutValue(training, heldOut, loss, point) : valueOnly;
  return {
    evaluate,
    *evaluateSteps(asked) {
      const evaluations = [];
      for (const { point, want } of asked) {
        if (evaluations.length > 0) yield;
        const evaluated = evaluate(point, want);
        if (!evaluated.ok) return evaluated;
        evaluations.push(evaluated.value);
      }
      return succeed(evaluations);
    },
    proximal: () => valueOnly,
    ownFit: () => valueOnly,
    sketch: () => valueOnly,
    joint: () => valueOnly,
    // biome-ignore lint/correctness/useYield: nothing is computed
    *jointSteps() {
      return valueOnly;
    },
    factor: () => valueOnly,
  };
}
