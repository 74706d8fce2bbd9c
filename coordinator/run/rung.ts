import type { FitSpecification } from '../../protocol/specification/types.js';
import type { Rung } from '../consensus/method.js';
import { type Member, memberName } from './run.js';
import type { PooledSurvey, Stop } from './survey.js';

/** Most columns for which p × p curvature is asked: above it the matrices outgrow links and coordinator. */
const CURVATURE_COLUMNS_MOST = 4000;

export interface RungChoice {
  readonly rung: Rung;
  readonly reason: string;
  /** Curvature matrices a fit may ask of every site. */
  readonly curvatureMost: number;
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
  const squared = specification.loss === 'squared';
  if (squared && budget >= 1 && (limit === 'highest' || limit === 'pooled'))
    return { rung: 'pooled', reason: `squared loss, and ${policy}`, curvatureMost: budget };
  if (budget === Number.POSITIVE_INFINITY && limit !== 'proximal' && limit !== 'sketched')
    return { rung: 'curvature', reason: why, curvatureMost: budget };
  const closed = survey.answers.findIndex(
    ({ allowance }) => !allowance.leave.includes('proximal') || !allowance.leave.includes('gradients'),
  );
  if (closed >= 0)
    return {
      outcome: 'refused',
      reason:
        `site ${memberName(roster[closed])} lets neither enough curvature nor proximal points and gradients leave. ` +
        'Its custodian can add `proximal` and `gradients` to `policy.leave`. [policy-kind]',
    };
  const asked =
    limit === 'proximal' || limit === 'sketched' ? 'the specification asks for no rung above it' : why;
  return { rung: 'proximal', reason: asked, curvatureMost: budget };
}
