import { reachOf } from '../inference/tests.js';
import type { Description } from './description.js';
import type { Basis } from './infer.js';
import type { Grounds } from './problems.js';
import { refitAll, twiceRise } from './refits.js';
import type { InferenceDocument } from './result-parts.js';
import { isStop, type Rounds } from './rounds.js';
import type { Batch, RunAsk } from './run.js';
import type { Stop } from './survey.js';

/** Refits of each bound at most. */
const STEPS_MOST = 12;
/** Of the root of the statistic, relative to where it should be. */
const CLOSE = 1e-7;
/** Times farther from the estimate in one step. */
const OUTWARDS_MOST = 3;

/** One bound that is looked for; roots are square roots of the likelihood ratio, 0 at the estimate. */
interface Search {
  readonly column: number;
  /** The estimate, on solver columns. */
  readonly estimate: number;
  /** The value held next. */
  next: number;
  /** The farthest value known to lie within the bound, and the nearest known to lie beyond it. */
  inner: Held;
  outer: Held | null;
  bound: number | null;
}

interface Held {
  readonly value: number;
  readonly root: number;
}

/**
 * Profile-likelihood intervals (Venzon and Moolgavkar 1988) of the coefficients named: where the fit with the
 * coefficient held has a likelihood ratio at the quantile of the level. All bounds are looked for together; a bound
 * that is not found within its steps is null.
 */
export function* profileIntervals(
  grounds: Grounds,
  rounds: Rounds,
  description: Description,
  { covariance, dispersion, degreesOfFreedom, level }: Basis,
): Generator<RunAsk, InferenceDocument['profile'] | Stop, Batch> {
  const { names, scale, intercept } = description.columns;
  const { p } = grounds.frame;
  const reach = reachOf(level, degreesOfFreedom);
  const { z } = description.end;
  const wanted = grounds.specification.report.profile.filter((name) => names.includes(name));
  const searches = wanted.flatMap((name) => {
    const column = names.indexOf(name);
    const step = reach * Math.sqrt(covariance[column * p + column]);
    return ([-1, 1] as const).map(
      (side): Search => ({
        column,
        estimate: z[column],
        next: z[column] + side * step,
        inner: { value: z[column], root: 0 },
        outer: null,
        bound: null,
      }),
    );
  });
  for (let k = 0; k < STEPS_MOST; k++) {
    const open = searches.filter(({ bound }) => bound === null);
    if (open.length === 0) break;
    const members = [...grounds.roster.keys()];
    const refits = open.map(({ column, next }) => ({ held: [{ column, value: next }], members }));
    const ends = yield* refitAll(grounds, rounds, description, refits);
    if (isStop(ends)) return ends;
    for (const [at, search] of open.entries()) {
      const rise = Math.max(0, twiceRise(grounds, description, ends[at]) / dispersion.value);
      narrow(search, Math.sqrt(rise), reach);
    }
  }
  const slope = (column: number): number => scale[column - (intercept ? 1 : 0)];
  return wanted.map((name, at) => {
    const [lower, upper] = searches.slice(2 * at, 2 * at + 2);
    const of = ({ bound, column }: Search): number | null => (bound === null ? null : bound / slope(column));
    return { name, lower: of(lower), upper: of(upper) };
  });
}

/** The root is nearly linear in the coefficient held: interpolated within a bracket, followed outwards without one. */
function narrow(search: Search, root: number, reach: number): void {
  const here: Held = { value: search.next, root };
  if (Math.abs(root - reach) <= CLOSE * reach) {
    search.bound = search.next;
    return;
  }
  if (root < reach) search.inner = here;
  else search.outer = here;
  const { inner, outer, estimate } = search;
  if (outer !== null) {
    const share = (reach - inner.root) / (outer.root - inner.root);
    search.next = inner.value + share * (outer.value - inner.value);
  } else {
    const farther = root > 0 ? Math.min(reach / root, OUTWARDS_MOST) : OUTWARDS_MOST;
    search.next = estimate + farther * (inner.value - estimate);
  }
}
