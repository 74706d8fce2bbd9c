import type { LeaveKind } from '../../protocol/messages/survey.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import { fitCount } from '../../protocol/specification/fit-count.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { allowanceOf } from '../custody/policy.js';
import type { Policy } from '../custody/site-file.js';
import type { surveyOf } from '../design/survey.js';

/** One kind of answer: what leaves with it, how often, and whether the policy lets it. */
export interface PossibleDeparture {
  readonly rung: 'every run' | 'proximal' | 'sketched' | 'curvature' | 'pooled' | 'report';
  readonly what: string;
  readonly numbers: number;
  readonly times: string;
  readonly kinds: readonly LeaveKind[];
  /** Null where it may leave. */
  readonly kept: string | null;
}

type RowMaker = (
  rung: PossibleDeparture['rung'],
  what: string,
  numbers: number,
  times: string,
  kinds: readonly LeaveKind[],
  other?: string | null,
) => PossibleDeparture;

/** Every kind of answer that a run of this specification may ask for, and whether the policy lets it leave. */
export function departuresOf(
  spec: FitSpecification,
  policy: Policy,
  survey: ReturnType<typeof surveyOf>,
): PossibleDeparture[] {
  const p = survey.columns.length + (spec.intercept === 'shared' ? 1 : 0);
  const matrix = (p * (p + 1)) / 2;
  const allowance = allowanceOf(policy);
  const surveyNumbers = numbersOfAnswer({ work: 'survey', ...survey, allowance });
  const fits = fitCount(spec);
  const perFit = fits === 1 ? '' : ' and fit';
  const squaredOnly = spec.loss.kind === 'squared' ? null : 'only for squared loss';
  const noMatrix = policy.curvatureMost === 0 ? 'policy.curvature-most is 0' : null;
  const few = policy.curvatureMost !== 'any' && policy.curvatureMost < 2;
  const lessThanTwo = few ? `policy.curvature-most is ${policy.curvatureMost}` : null;
  const most = policy.curvatureMost === 'any' ? 'a point' : `${policy.curvatureMost} a fit at most`;
  const kept = (kinds: readonly LeaveKind[]): string | null => {
    const missing = kinds.filter((kind) => !policy.leave.includes(kind));
    return missing.length === 0 ? null : `policy.leave has no ${missing.join(', ')}`;
  };
  const row: RowMaker = (rung, what, numbers, times, kinds, other = null) => ({
    rung,
    what,
    numbers,
    times,
    kinds,
    kept: other ?? kept(kinds),
  });
  const factors = Math.max(1, survey.folds.length);
  return [
    row('every run', 'survey: counts, pooled moments', surveyNumbers, 'once', ['counts', 'moments']),
    row('proximal', 'a proximal point', p + 1, `a round${perFit}`, ['proximal']),
    row('proximal', 'loss, gradient, curvature diagonal', 2 * p + 1, 'a check', ['gradients']),
    row(
      'sketched',
      'losses, gradients, curvature in 8 directions',
      (8 + 4) * p + 7,
      `a round${perFit}`,
      ['gradients', 'sketches'],
      noMatrix,
    ),
    row(
      'curvature',
      'loss, gradient, curvature matrix',
      2 * p + 1 + matrix,
      most,
      ['gradients', 'curvature'],
      noMatrix,
    ),
    ...(spec.barrier.quorum === 'all'
      ? []
      : [
          row(
            'curvature',
            'a proximal point, and losses, gradients and curvature matrices at both ends of it',
            2 * (1 + p + matrix) + p + 1,
            'where this site is late',
            ['proximal', 'gradients', 'curvature'],
            lessThanTwo,
          ),
        ]),
    row(
      'pooled',
      factors === 1 ? 'the triangular factor' : `a triangular factor of each of ${factors} folds`,
      factors * (matrix + p + 1),
      'once',
      ['curvature'],
      squaredOnly ?? noMatrix,
    ),
    ...reportDepartures(spec, p, row, noMatrix),
  ];
}

/** What the report of the specification makes leave beside the fit. */
function reportDepartures(
  { report }: FitSpecification,
  p: number,
  row: RowMaker,
  noMatrix: string | null,
): PossibleDeparture[] {
  const { sandwich, margins, compareSites, fitQuality } = report;
  const matrix = (p * (p + 1)) / 2;
  const clustered = sandwich !== null && sandwich.cluster !== null;
  const rows: PossibleDeparture[] = [];
  if (sandwich !== null) {
    const what = clustered ? 'sums of score products, by row and by cluster' : 'sums of score products';
    const numbers = p + 2 + matrix * (clustered ? 2 : 1);
    rows.push(row('report', what, numbers, 'once', ['gradients', 'curvature'], noMatrix));
  }
  if (margins) rows.push(row('report', 'mean prediction and its gradient', p + 1, 'a level', ['gradients']));
  if (compareSites) {
    const numbers = p + 2 + matrix;
    rows.push(
      row('report', "this site's own fit, with its curvature", numbers, 'once', ['site-estimates'], noMatrix),
    );
  }
  if (fitQuality)
    rows.push(
      row('report', 'binned responses, sums of residuals and leverages', 3, 'a bin', ['residual-bins']),
    );
  return rows;
}
