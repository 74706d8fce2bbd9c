import { chiSquaredUpper, fisherUpper } from '../../numerics/distributions.js';
import { unpackSymmetric } from '../../numerics/packed.js';
import type { MethodEnd } from '../consensus/method.js';
import { inverseOf } from '../inference/covariance.js';
import { heterogeneityOf } from '../inference/heterogeneity.js';
import { coefficientsOf, covarianceOnOriginal } from '../inference/original-scale.js';
import { interval, reachOf } from '../inference/tests.js';
import { comparisonWords } from './compare-words.js';
import type { Description } from './description.js';
import { hasLikelihood, modelCovariance } from './model-covariance.js';
import type { Grounds } from './problems.js';
import { refitAll } from './refits.js';
import type {
  ComparisonDocument,
  Heterogeneity,
  Interval,
  OmittedPart,
  SiteComparison,
} from './result-parts.js';
import { isStop, type Rounds } from './rounds.js';
import { type Batch, memberName, type RunAsk } from './run.js';
import type { Stop } from './survey.js';

const LEVEL = 0.95;

/** Whether the sites share one model: their own fits, how these differ, and the fit without each of them. */
export function* comparisonOf(
  grounds: Grounds,
  rounds: Rounds,
  description: Description,
  omitted: OmittedPart[],
): Generator<RunAsk, ComparisonDocument | Stop | null, Batch> {
  const { roster, specification } = grounds;
  const omit = (part: string, reason: string): void => void omitted.push({ part, reason });
  const own = roster.map((_, i) => ownFit(grounds, description, i));
  const members = [...roster.keys()];
  const canLeaveOut = description.members !== null && roster.length > 1;
  if (!canLeaveOut) omit('leaving one site out', "the sites' curvature at the fit is not known");
  const without = canLeaveOut
    ? yield* refitAll(
        grounds,
        rounds,
        description,
        members.map((i) => ({ held: [], members: members.filter((other) => other !== i) })),
      )
    : null;
  if (without !== null && isStop(without)) return without;
  const errors = commonErrors(grounds, description);
  const shares = description.members === null ? null : informationShares(description);
  const sites = roster.map(
    (member, i): SiteComparison => ({
      site: memberName(member),
      rowsUsed: grounds.survey.answers[i].rowsUsed,
      reason: own[i].reason,
      own: own[i].fit,
      ...deviances(grounds, description, i),
      informationShare: shares?.[i] ?? {},
      leftOut: without === null ? null : leftOut(description, without[i], errors),
    }),
  );
  const byLikelihood = hasLikelihood(grounds);
  if (!byLikelihood) {
    const why =
      specification.penalties.length > 0 ? 'the fit is penalised' : 'a Huber loss has no likelihood';
    omit('test of one common model', `${why}: the likelihood ratio has no known distribution`);
  }
  const comparison = {
    sites,
    heterogeneity: heterogeneities(description, own),
    commonModel: byLikelihood ? commonModelTest(grounds, description) : null,
  };
  return { ...comparison, words: comparisonWords(comparison, description.columns.names) };
}

interface OwnFit {
  readonly fit: Readonly<Record<string, Interval>> | null;
  readonly reason: string | null;
}

/** A member's own fit on the original scale, with Wald intervals; columns that it does not determine are left out. */
function ownFit(grounds: Grounds, description: Description, member: number): OwnFit {
  const answer = description.siteFits?.[member] ?? null;
  if (answer === null) return { fit: null, reason: 'its policy does not let its own fit leave' };
  if (answer.fit === null) return { fit: null, reason: answer.reason };
  const { survey, specification, frame } = grounds;
  if (specification.loss.kind === 'huber')
    return { fit: null, reason: 'the curvature of a Huber loss does not tell how sure an own fit is' };
  const { p } = frame;
  const { point, value, curvature, undetermined } = answer.fit;
  const known = [...point.keys()].filter((j) => !undetermined.includes(j));
  const inverse = inverseOf(subMatrix(unpackSymmetric(curvature), p, known), known.length);
  if (inverse === null) return { fit: null, reason: 'its curvature is singular' };
  const n = survey.rowsTotal;
  const isSquared = specification.loss.kind === 'squared';
  const spent = known.length + (specification.intercept === 'per-site' ? 1 : 0);
  const degrees = survey.answers[member].rowsUsed - spent;
  if (degrees < 1) return { fit: null, reason: 'it has no more rows than coefficients' };
  const dispersion = isSquared ? (2 * n * value) / degrees : 1;
  const covariance = new Float64Array(p * p);
  known.forEach((i, a) => {
    known.forEach((j, c) => {
      covariance[i * p + j] = (inverse[a * known.length + c] * dispersion) / n;
    });
  });
  const { columns } = description;
  const original = covarianceOnOriginal(columns, covariance);
  const estimates = coefficientsOf(columns, point);
  const reach = reachOf(LEVEL, isSquared ? degrees : null);
  const intervals = known.map((j): [string, Interval] => {
    const standardError = Math.sqrt(Math.max(0, original[j * p + j]));
    return [columns.names[j], interval(estimates[j], standardError, reach)];
  });
  return { fit: Object.fromEntries(intervals), reason: null };
}

function subMatrix(matrix: Float64Array, p: number, indices: readonly number[]): Float64Array {
  return Float64Array.from({ length: indices.length ** 2 }, (_, at) => {
    const i = indices[Math.floor(at / indices.length)];
    return matrix[i * p + indices[at % indices.length]];
  });
}

/** Standard errors of the common fit, by name; null where its curvature is not known, or says nothing of them. */
function commonErrors(grounds: Grounds, description: Description): Map<string, number> | null {
  const covariance = hasLikelihood(grounds) ? modelCovariance(grounds, description) : null;
  if (covariance === null) return null;
  const { columns } = description;
  const original = covarianceOnOriginal(columns, covariance);
  return new Map(columns.names.map((name, j) => [name, Math.sqrt(original[j * grounds.frame.p + j])]));
}

/** Per member, its share of the diagonal of the pooled information, by coefficient. */
function informationShares({ members, columns }: Description): Readonly<Record<string, number>>[] {
  const p = columns.names.length;
  const diagonals = (members ?? []).map(({ curvature }) =>
    Float64Array.from({ length: p }, (_, j) => curvature[j * p + j]),
  );
  return diagonals.map((own) =>
    Object.fromEntries(
      columns.names.map((name, j) => {
        const total = diagonals.reduce((sum, other) => sum + other[j], 0);
        return [name, total > 0 ? own[j] / total : 0];
      }),
    ),
  );
}

/** Deviance of the member's rows under the common fit and under its own. */
function deviances(
  { survey }: Grounds,
  { members, siteFits }: Description,
  member: number,
): Pick<SiteComparison, 'devianceCommon' | 'devianceOwn'> {
  const { saturatedLoss } = survey.answers[member].response;
  const of = (value: number | undefined): number | null =>
    value === undefined ? null : 2 * (survey.rowsTotal * value - saturatedLoss);
  return { devianceCommon: of(members?.[member].value), devianceOwn: of(siteFits?.[member]?.fit?.value) };
}

/** Coefficients of the fit without one member, and how far they lie from the common ones. */
function leftOut(
  { columns, end }: Description,
  without: MethodEnd,
  errors: ReadonlyMap<string, number> | null,
): SiteComparison['leftOut'] {
  if (without.outcome !== 'solved') return null;
  const common = coefficientsOf(columns, end.z);
  const estimates = coefficientsOf(columns, without.z);
  return Object.fromEntries(
    columns.names.map((name, j) => {
      const change = estimates[j] - common[j];
      const error = errors?.get(name);
      const changeInStandardErrors = error === undefined || !(error > 0) ? null : change / error;
      return [name, { estimate: estimates[j], change, changeInStandardErrors }];
    }),
  );
}

/** Of every coefficient that at least two members determine by themselves. */
function heterogeneities({ columns, end }: Description, own: readonly OwnFit[]): Heterogeneity[] {
  const common = coefficientsOf(columns, end.z);
  return columns.names.flatMap((name, j): Heterogeneity[] => {
    const sites = own
      .flatMap(({ fit }) => fit?.[name] ?? [])
      .filter(({ standardError }) => standardError > 0);
    if (sites.length < 2) return [];
    const { average, q, degreesOfFreedom, pValue, i2, tau2 } = heterogeneityOf(sites);
    return [
      {
        name,
        sites: sites.length,
        q,
        degreesOfFreedom,
        pValue,
        i2,
        tau2,
        average: interval(average.estimate, average.standardError, reachOf(LEVEL, null)),
        averageMinusCommon: average.estimate - common[j],
      },
    ];
  });
}

/**
 * Likelihood-ratio test of one common model against one of its own at every site: all of them must determine every
 * coefficient. For a squared loss, its F form (Chow 1960).
 */
function commonModelTest(
  { survey, specification, frame, roster }: Grounds,
  { siteFits, end }: Description,
): ComparisonDocument['commonModel'] {
  const fits = (siteFits ?? []).map((answer) => answer?.fit ?? null);
  if (fits.length < 2 || fits.some((fit) => fit === null || fit.undetermined.length > 0)) return null;
  const n = survey.rowsTotal;
  const own = fits.reduce((sum, fit) => sum + (fit?.value ?? 0), 0);
  const rise = Math.max(0, 2 * n * (end.loss - own));
  const count = (roster.length - 1) * frame.p;
  if (specification.loss.kind !== 'squared')
    return { statistic: rise, degreesOfFreedom: count, pValue: chiSquaredUpper(rise, count) };
  const perSite = specification.intercept === 'per-site' ? roster.length : 0;
  const degrees = n - roster.length * frame.p - perSite;
  if (degrees < 1) return null;
  const statistic = rise / count / ((2 * n * own) / degrees);
  return { statistic, degreesOfFreedom: count, pValue: fisherUpper(statistic, count, degrees) };
}
