import type { FitSpecification } from '../../protocol/specification/types.js';
import type { Rung } from '../consensus/method.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import { type Member, memberName } from './run.js';
import { NO_SKETCH, sketchBudget } from './sketch-budget.js';
import type { PooledSurvey, Stop } from './survey.js';

/** Most columns for which p × p curvature is asked: above it the matrices outgrow links and coordinator. */
const CURVATURE_COLUMNS_MOST = 4000;
/** With so many matrices the proximal rung is led by models of the sites, in fewer rounds and numbers than sketches. */
const LEADING_MATRICES = 2;

export interface RungChoice {
  readonly rung: Rung;
  readonly reason: string;
  /** Curvature matrices a fit may ask of every site. */
  readonly curvatureMost: number;
  /** Directions of curvature a fit may ask of every site, in a round and in all. */
  readonly sketch: ConsensusProblem['sketch'];
}

/** The highest rung of the ladder that every site's policy, the specification and p allow, and why not a higher one. */
export function chooseRung(
  specification: FitSpecification,
  survey: PooledSurvey,
  roster: readonly Member[],
  p: number,
): RungChoice | Stop {
  const { rung: limit } = specification.rounds;
  const budgets = survey.answers.map(({ allowance }) =>
    allowance.leave.includes('curvature') ? (allowance.curvatureMost ?? Number.POSITIVE_INFINITY) : 0,
  );
  const least = Math.min(...budgets);
  const strictest = memberName(roster[budgets.indexOf(least)]);
  const budget = p > CURVATURE_COLUMNS_MOST ? 0 : least;
  const policy = Number.isFinite(least)
    ? `${strictest} lets ${least === 0 ? 'no curvature matrix' : `at most ${least} curvature ${least === 1 ? 'matrix' : 'matrices'} a fit`} leave`
    : 'every site lets curvature leave';
  const why = p > CURVATURE_COLUMNS_MOST ? `${p} columns are too many for curvature matrices` : policy;
  const squared = specification.loss.kind === 'squared';
  // folds of a factor do not add up where each would have its own intercept
  const mergeable = specification.intercept !== 'per-site' || survey.folds.length === 0;
  if (squared && mergeable && budget >= 1 && (limit === 'highest' || limit === 'pooled'))
    return { ...unsketched(budget), rung: 'pooled', reason: `squared loss, and ${policy}` };
  if (budget === Number.POSITIVE_INFINITY && limit !== 'proximal' && limit !== 'sketched')
    return { ...unsketched(budget), rung: 'curvature', reason: why };
  return lowerRung(specification, survey, roster, p, budget, why);
}

const unsketched = (curvatureMost: number) => ({ curvatureMost, sketch: NO_SKETCH });

/** `sketched` or `proximal`: `why` says what keeps the run from the rungs above. */
function lowerRung(
  specification: FitSpecification,
  survey: PooledSurvey,
  roster: readonly Member[],
  p: number,
  curvatureMost: number,
  why: string,
): RungChoice | Stop {
  const { rung: limit } = specification.rounds;
  const closed = survey.answers.findIndex(
    ({ allowance }) => !allowance.leave.includes('proximal') || !allowance.leave.includes('gradients'),
  );
  const sketch = sketchBudget(specification, survey, roster, p);
  const asked = limit === 'proximal' || limit === 'sketched';
  const above = asked ? 'the specification asks for no rung above it' : why;
  const pays =
    limit !== 'proximal' && (limit === 'sketched' || curvatureMost < LEADING_MATRICES || closed >= 0);
  if (sketch.kind === 'open' && pays)
    return { rung: 'sketched', reason: above, curvatureMost, sketch: sketch.budget };
  if (closed >= 0)
    return {
      outcome: 'refused',
      reason:
        `site ${memberName(roster[closed])} lets neither enough curvature nor proximal points and gradients leave. ` +
        'Its custodian can add `proximal` and `gradients` to `policy.leave`. [policy-kind]',
    };
  const reason =
    sketch.kind === 'closed' && limit === 'sketched'
      ? sketch.reason
      : sketch.kind === 'meagre' && pays
        ? `${above}, and ${sketch.reason}`
        : above;
  return { ...unsketched(curvatureMost), rung: 'proximal', reason };
}
