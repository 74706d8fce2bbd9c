import { packSymmetric, unpackSymmetric } from '../../numerics/packed.js';
import { mergeFactors } from '../../numerics/triangular-factor.js';
import type { MarginsWork } from '../../protocol/messages/margins.js';
import type { Work } from '../../protocol/messages/round.js';
import type { MethodEnd } from '../consensus/method.js';
import { FactoredModel } from '../consensus/pooled-rung.js';
import { inverseOf } from '../inference/covariance.js';
import { marginSettings } from './margins.js';
import type { Grounds } from './problems.js';
import type { OmittedPart } from './result-parts.js';
import { memberName } from './run.js';
import { startOn } from './scale.js';
import type { Solved } from './solve.js';

/** Bins of the linear predictor on each side of its middle, where it is not a probability that is binned. */
const BINS_A_SIDE = 8;
const BIN_WIDTH = 0.25;
/** Bins of a probability: so many, and so many rows of the smallest site in each on average. */
const PROBABILITY_BINS = { least: 5, most: 100, rowsEach: 20 } as const;

/** What the members are asked about a fit, as far as their policies let it leave. */
export interface DescribePlan {
  readonly problem: number;
  readonly end: MethodEnd;
  /** On the pooled rung, every member's f from its triangular factor: nothing is asked about it. */
  readonly fromFactors: readonly FactoredModel[] | null;
  /** Curvature at the fit is asked of every member. */
  readonly quadratics: boolean;
  readonly scores: { readonly meat: boolean; readonly clustered: boolean } | null;
  /** The intercept-only fit, whose loss is asked; null where it is not wanted or not known in closed form. */
  readonly nullPoint: Float64Array | null;
  /** Per member: whether its own fit is asked. */
  readonly siteFits: readonly boolean[];
  readonly margins: MarginsWork['settings'] | null;
  readonly quality: { readonly edges: Float64Array; readonly inverse: Float64Array | null } | null;
  readonly omitted: readonly OmittedPart[];
}

export function planOf(grounds: Grounds, problem: number, solved: Solved, end: MethodEnd): DescribePlan {
  const { specification, survey, frame } = grounds;
  const { report } = specification;
  const omitted: OmittedPart[] = [];
  const omit = (part: string, reason: string): void => void omitted.push({ part, reason });
  const fromFactors = solved.first?.kind === 'factor' ? factorModels(grounds, solved.first.factors) : null;
  // a problem of its own, so that the limit per fit holds for it afresh
  let left = grounds.choice.curvatureMost;
  const take = (matrices: number): boolean => {
    const taken = left >= matrices;
    if (taken) left -= matrices;
    return taken;
  };
  const wantsCurvature = report.covariance || report.compareSites || report.fitQuality;
  const budget = `${closest(grounds)} lets no further curvature matrix leave; its custodian can raise \`curvature-most\``;
  const clustered = report.sandwich !== null && report.sandwich.cluster !== null;
  // with a matrix measured on the way, the meat is what is still unknown
  const meatFirst = report.sandwich !== null && end.curvature !== null;
  const meat = meatFirst && take(clustered ? 2 : 1);
  const quadratics = fromFactors === null && wantsCurvature && take(1);
  const lateMeat = report.sandwich !== null && !meat && quadratics && take(clustered ? 2 : 1);
  if (report.sandwich !== null && !meat && !lateMeat) omit('sandwich', budget);
  if (wantsCurvature && fromFactors === null && !quadratics && end.curvature === null)
    omit('covariance', budget);
  const hasMeat = meat || lateMeat;
  const sends = (kind: string): readonly boolean[] =>
    survey.answers.map(({ allowance }) => allowance.leave.some((one) => one === kind));
  const closed = (kind: string): string[] =>
    sends(kind).flatMap((leaves, i) => (leaves ? [] : [memberName(grounds.roster[i])]));
  const canScore = closed('gradients').length === 0;
  if (!canScore && (report.covariance || report.margins))
    omit('margins and dispersion', `${closed('gradients').join(', ')} lets no gradients leave`);
  const bins = closed('residual-bins');
  if (report.fitQuality && bins.length > 0)
    omit('fit quality', `${bins.join(', ')} does not let \`residual-bins\` leave`);
  const ownFits = report.compareSites ? sends('site-estimates') : survey.answers.map(() => false);
  if (report.compareSites && ownFits.some((leaves) => !leaves))
    omit(
      `own fit of ${closed('site-estimates').join(', ')}`,
      'its policy does not let `site-estimates` leave',
    );
  const settings =
    report.margins && canScore
      ? marginSettings(specification).map((one) =>
          one.set === 'slope' ? { set: one.set, column: one.column } : { ...one },
        )
      : [];
  const pooled = end.curvature === null ? null : unpackSymmetric(end.curvature);
  const inverse = pooled === null ? null : inverseOf(pooled, frame.p);
  return {
    problem,
    end,
    fromFactors,
    quadratics,
    nullPoint:
      report.fitQuality && hasNullFit(specification) ? startOn(specification, frame, survey.response) : null,
    scores: canScore && report.covariance ? { meat: hasMeat, clustered: hasMeat && clustered } : null,
    siteFits: ownFits,
    margins: settings.length > 0 ? settings : null,
    quality:
      report.fitQuality && bins.length === 0
        ? {
            edges: binEdges(grounds, end.z),
            inverse: inverse === null ? null : packSymmetric(inverse, frame.p),
          }
        : null,
    omitted,
  };
}

/** One ask to every member, as planned. */
export function describeWorks({ roster, frame, survey }: Grounds, plan: DescribePlan): Work[][] {
  const { problem, end } = plan;
  const point = end.z;
  const points = [
    ...(plan.quadratics ? [{ point, want: 'curvature' as const }] : []),
    ...(plan.nullPoint !== null && plan.fromFactors === null
      ? [{ point: plan.nullPoint, want: 'value' as const }]
      : []),
  ];
  return roster.map((_, i): Work[] => [
    ...(points.length > 0
      ? [
          {
            work: 'evaluate' as const,
            problem,
            part: null,
            points,
            ownFit: null,
            sketch: null,
          },
        ]
      : []),
    ...(plan.scores === null ? [] : [{ work: 'scores' as const, problem, point, ...plan.scores }]),
    ...(plan.siteFits[i] ? [{ work: 'site-fit' as const, problem, start: point }] : []),
    ...(plan.margins === null ? [] : [{ work: 'margins' as const, problem, point, settings: plan.margins }]),
    ...(plan.quality === null
      ? []
      : [
          {
            work: 'quality' as const,
            problem,
            point,
            ...plan.quality,
            leverageHigh: (2 * frame.p) / survey.rowsTotal,
          },
        ]),
  ]);
}

/** Whether the intercept-only fit follows from the survey's sums. */
const hasNullFit = ({ loss, offset, intercept }: Grounds['specification']): boolean =>
  intercept === 'shared' && loss.kind !== 'huber' && (loss.kind === 'poisson' || offset === null);

/** The member with the smallest limit on curvature. */
function closest({ roster, survey }: Grounds): string {
  const limits = survey.answers.map(({ allowance }) =>
    allowance.leave.includes('curvature') ? (allowance.curvatureMost ?? Number.POSITIVE_INFINITY) : 0,
  );
  return memberName(roster[limits.indexOf(Math.min(...limits))]);
}

/** Edges on the scale of the linear predictor: even in probability, or in the predictor's own spread about its middle. */
function binEdges({ specification, frame, survey }: Grounds, z: Float64Array): Float64Array {
  if (specification.loss.kind === 'logistic') {
    const { least, most, rowsEach } = PROBABILITY_BINS;
    const smallest = Math.min(...survey.answers.map(({ rowsUsed }) => rowsUsed));
    const bins = Math.min(most, Math.max(least, Math.floor(smallest / rowsEach)));
    return Float64Array.from({ length: bins - 1 }, (_, k) => Math.log((k + 1) / (bins - k - 1)));
  }
  const slopes = frame.intercept ? z.slice(1) : z;
  const spread = Math.hypot(...slopes) || 1;
  const middle = frame.intercept ? z[0] : 0;
  return Float64Array.from(
    { length: 2 * BINS_A_SIDE + 1 },
    (_, k) => middle + (k - BINS_A_SIDE) * BIN_WIDTH * spread,
  );
}

/** Every member's f from its triangular factor; with folds, its factors merged. */
function factorModels({ roster, frame: { p } }: Grounds, factors: readonly Float64Array[]): FactoredModel[] {
  const each = factors.length / roster.length;
  return roster.map(
    (_, i) => new FactoredModel(mergeFactors(factors.slice(i * each, (i + 1) * each), p + 1), p),
  );
}
