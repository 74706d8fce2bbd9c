import { packSymmetric, unpackSymmetric } from '../../numerics/packed.js';
import { mergeFactors } from '../../numerics/triangular-factor.js';
import type { MarginsWork } from '../../protocol/messages/margins.js';
import type { Work } from '../../protocol/messages/round.js';
import type { LeaveKind } from '../../protocol/messages/survey.js';
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
  const fromFactors = solved.first?.kind === 'factor' ? factorModels(grounds, solved.first.factors) : null;
  const { quadratics, meat } = spendMatrices(grounds, end, fromFactors !== null, omitted);
  const canScore = allLet(grounds, 'gradients', report.covariance || report.margins, omitted, {
    part: 'margins and dispersion',
    reason: 'no gradients leave',
  });
  const canBin = allLet(grounds, 'residual-bins', report.fitQuality, omitted, {
    part: 'fit quality',
    reason: 'no `residual-bins` leave',
  });
  const clustered = meat && isClustered(grounds);
  const settings = report.margins && canScore ? marginSettings(specification) : [];
  return {
    problem,
    end,
    fromFactors,
    quadratics,
    nullPoint:
      report.fitQuality && hasNullFit(specification) ? startOn(specification, frame, survey.response) : null,
    scores: canScore && report.covariance ? { meat, clustered } : null,
    siteFits: ownFitsAsked(grounds, omitted),
    margins:
      settings.length > 0
        ? settings.map((one) => (one.set === 'slope' ? { set: one.set, column: one.column } : { ...one }))
        : null,
    quality:
      report.fitQuality && canBin
        ? { edges: binEdges(grounds, end.z), inverse: inverseAt(grounds, end) }
        : null,
    omitted,
  };
}

const isClustered = ({ specification }: Grounds): boolean =>
  (specification.report.sandwich?.cluster ?? null) !== null;

/**
 * What the limit on curvature matrices is spent on: the meat first where a matrix was measured on the way, since the meat
 * is what is still unknown; else the curvature at the fit first. The report is a problem of its own, so that the limit
 * per fit holds for it afresh.
 */
function spendMatrices(
  grounds: Grounds,
  end: MethodEnd,
  factored: boolean,
  omitted: OmittedPart[],
): { readonly quadratics: boolean; readonly meat: boolean } {
  const { covariance, compareSites, fitQuality, sandwich } = grounds.specification.report;
  let left = grounds.choice.curvatureMost;
  const take = (matrices: number): boolean => {
    const taken = left >= matrices;
    if (taken) left -= matrices;
    return taken;
  };
  const meats = isClustered(grounds) ? 2 : 1;
  const wantsCurvature = !factored && (covariance || compareSites || fitQuality);
  const meatFirst = sandwich !== null && end.curvature !== null && take(meats);
  const quadratics = wantsCurvature && take(1);
  const meat = meatFirst || (sandwich !== null && quadratics && take(meats));
  const reason = `${closest(grounds)} lets no further curvature matrix leave; its custodian can raise \`curvature-most\``;
  if (sandwich !== null && !meat) omitted.push({ part: 'sandwich', reason });
  if (wantsCurvature && !quadratics && end.curvature === null) omitted.push({ part: 'covariance', reason });
  return { quadratics, meat };
}

/** Members whose policy lets a kind of answer leave. */
const letting = ({ survey }: Grounds, kind: LeaveKind): boolean[] =>
  survey.answers.map(({ allowance }) => allowance.leave.includes(kind));

/** Whether every member lets a kind leave; where it is wanted and one does not, the part is omitted, naming who. */
function allLet(
  grounds: Grounds,
  kind: LeaveKind,
  wanted: boolean,
  omitted: OmittedPart[],
  { part, reason }: OmittedPart,
): boolean {
  const closed = letting(grounds, kind).flatMap((leaves, i) =>
    leaves ? [] : [memberName(grounds.roster[i])],
  );
  if (closed.length > 0 && wanted) omitted.push({ part, reason: `${closed.join(', ')}: ${reason}` });
  return closed.length === 0;
}

function ownFitsAsked(grounds: Grounds, omitted: OmittedPart[]): boolean[] {
  const { roster, specification } = grounds;
  if (!specification.report.compareSites) return roster.map(() => false);
  const leaves = letting(grounds, 'site-estimates');
  const closed = roster.filter((_, i) => !leaves[i]).map(memberName);
  if (closed.length > 0)
    omitted.push({
      part: `own fit of ${closed.join(', ')}`,
      reason: 'its policy does not let `site-estimates` leave',
    });
  return leaves;
}

/** Packed inverse of the curvature measured on the way; null where there is none. */
function inverseAt({ frame }: Grounds, { curvature }: MethodEnd): Float64Array | null {
  const inverse = curvature === null ? null : inverseOf(unpackSymmetric(curvature), frame.p);
  return inverse === null ? null : packSymmetric(inverse, frame.p);
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
