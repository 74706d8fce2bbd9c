import { scaled, sumOf } from '../../numerics/vector.js';
import { inverseOf, outerSum, sandwiched } from '../inference/covariance.js';
import { coefficientsOf, covarianceOnOriginal } from '../inference/original-scale.js';
import { benjaminiHochberg, holm, interval, reachOf, twoSided } from '../inference/tests.js';
import { debiasedIntervals } from './debiased.js';
import { type Description, pooledMeat } from './description.js';
import { marginsOf } from './margins.js';
import { dispersionOf, hasLikelihood, modelCovariance, residualDegrees } from './model-covariance.js';
import type { Grounds } from './problems.js';
import { profileIntervals } from './profile.js';
import type {
  CoefficientTest,
  CovarianceDocument,
  CovarianceKind,
  InferenceDocument,
  OmittedPart,
} from './result-parts.js';
import { isStop, type Rounds } from './rounds.js';
import type { Batch, RunAsk } from './run.js';
import type { Stop } from './survey.js';
import { termTests } from './term-tests.js';

const LEVEL = 0.95;
/** Clusters under which a clustered covariance is called unsound (common practice, no source). */
const CLUSTERS_LEAST = 20;

/** What tests and intervals rest on, on solver columns. */
export interface Basis {
  readonly used: CovarianceKind;
  /** Row-major p × p, of θ. */
  readonly covariance: Float64Array;
  /** Degrees of freedom of the residual, where the dispersion is estimated; null: the normal reference. */
  readonly degreesOfFreedom: number | null;
  readonly dispersion: InferenceDocument['dispersion'];
  readonly level: number;
}

/** How sure the coefficients are: covariances, tests and intervals; null where nothing can be said, with the reason. */
export function* inferenceOf(
  grounds: Grounds,
  rounds: Rounds,
  description: Description,
  omitted: OmittedPart[],
): Generator<RunAsk, InferenceDocument | Stop | null, Batch> {
  const { specification, frame } = grounds;
  const { report } = specification;
  const omit = (part: string, reason: string): null => {
    omitted.push({ part, reason });
    return null;
  };
  if (description.curvature === null) return null;
  const inverse = inverseOf(description.curvature, frame.p);
  if (inverse === null)
    return omit('covariance', 'the curvature at the fit is singular: coefficients are aliased');
  const isPenalised = specification.penalties.length > 0;
  const all = solverCovariances(grounds, description, inverse);
  const basis = basisOf(grounds, description, all);
  if (basis === null)
    return omit('covariance', 'a Huber loss has no likelihood: ask for `sandwich` in the report');
  const covariances = isPenalised ? [] : all.map((one) => covarianceDocument(description, one));
  const main = covariances.find(({ kind }) => kind === basis.used);
  const tests = main === undefined ? [] : coefficientTests(description, main, basis);
  if (isPenalised && !report.debiased)
    omit(
      'intervals',
      'a penalty shrinks the coefficients, so that Wald intervals would not cover; ask for `debiased` in `report`',
    );
  const byLikelihood = hasLikelihood(grounds);
  const why = isPenalised ? 'the fit is penalised' : 'a Huber loss has no likelihood';
  if (report.termTests && !byLikelihood)
    omit('tests of terms', `${why}: the ratio has no known distribution`);
  if (report.profile.length > 0 && !byLikelihood) omit('profile intervals', `${why}: there is no profile`);
  const terms = report.termTests && byLikelihood ? yield* termTests(grounds, rounds, description, basis) : [];
  if (isStop(terms)) return terms;
  const profile =
    report.profile.length > 0 && byLikelihood
      ? yield* profileIntervals(grounds, rounds, description, basis)
      : [];
  if (isStop(profile)) return profile;
  return {
    level: LEVEL,
    degreesOfFreedom: basis.degreesOfFreedom,
    dispersion: basis.dispersion,
    used: basis.used,
    covariances,
    coefficients: tests,
    terms,
    profile,
    debiased: report.debiased && isPenalised ? debiasedIntervals(grounds, description, basis) : [],
    ...(isPenalised ? NO_MARGINS : marginsOf(grounds, description, basis)),
    cautions: cautionsOf(grounds, isPenalised, basis, covariances),
  };
}

const NO_MARGINS = { marginalMeans: [], marginalEffects: [] } as const;

/** What tests and intervals use: the first of these that the answers allow. */
const USED: readonly CovarianceKind[] = ['cluster-g1', 'hc1', 'model'];

function basisOf(
  grounds: Grounds,
  description: Description,
  covariances: readonly SolverCovariance[],
): Basis | null {
  const main = USED.map((used) => covariances.find(({ kind }) => kind === used)).find(
    (one) => one !== undefined,
  );
  if (main === undefined) return null;
  const dispersion = dispersionOf(grounds, description);
  const degreesOfFreedom = dispersion.kind === 'residual' ? residualDegrees(grounds) : null;
  return { used: main.kind, covariance: main.covariance, degreesOfFreedom, dispersion, level: LEVEL };
}

interface SolverCovariance {
  readonly kind: CovarianceKind;
  readonly covariance: Float64Array;
  readonly clusters: number | null;
}

/**
 * Every covariance of θ that the answers allow. With A the inverse curvature of the mean loss and B a meat per row,
 * cov = A B A / N (Huber 1967; White 1980); clustered, B sums products of clusters' scores (Liang and Zeger 1986).
 */
function solverCovariances(
  grounds: Grounds,
  description: Description,
  inverse: Float64Array,
): SolverCovariance[] {
  const { scores, members } = description;
  const { frame, survey, roster, specification } = grounds;
  const { p } = frame;
  const n = survey.rowsTotal;
  const model = specification.loss.kind === 'huber' ? null : modelCovariance(grounds, description);
  const out: SolverCovariance[] =
    model === null ? [] : [{ kind: 'model', covariance: model, clusters: null }];
  if (specification.report.sandwich === null) return out;
  const over = (meat: Float64Array, factor: number): Float64Array =>
    sandwiched(inverse, meat, p).map((value) => (value * factor) / n);
  const meat = pooledMeat(scores, 'meat');
  if (meat !== null) {
    const hc1 = n / residualDegrees(grounds);
    out.push({ kind: 'hc0', covariance: over(meat, 1), clusters: null });
    out.push({ kind: 'hc1', covariance: over(meat, hc1), clusters: null });
  }
  const clustered = pooledMeat(scores, 'clustered');
  if (clustered !== null) {
    const clusters = (scores ?? []).reduce((sum, own) => sum + own.clusterCount, 0);
    out.push({ kind: 'cluster', covariance: over(clustered, 1), clusters });
    if (clusters > 1)
      out.push({ kind: 'cluster-g1', covariance: over(clustered, clusters / (clusters - 1)), clusters });
  }
  const gradients = scores?.map(({ gradient }) => gradient) ?? members?.map(({ gradient }) => gradient);
  const sites = [...new Set(roster.map(({ site }) => site))];
  if (gradients !== undefined && sites.length > 1) {
    const own = sites.map((site) =>
      scaled(Math.sqrt(n), sumOf(gradients.filter((_, i) => roster[i].site === site))),
    );
    const bySite = outerSum(own, p);
    out.push({ kind: 'site', covariance: over(bySite, 1), clusters: sites.length });
    const factor = sites.length / (sites.length - 1);
    out.push({ kind: 'site-g1', covariance: over(bySite, factor), clusters: sites.length });
  }
  return out;
}

function covarianceDocument({ columns }: Description, one: SolverCovariance): CovarianceDocument {
  const { kind, clusters } = one;
  const p = columns.names.length;
  const original = covarianceOnOriginal(columns, one.covariance);
  return {
    kind,
    order: columns.names,
    covariance: columns.names.map((_, i) => [...original.slice(i * p, (i + 1) * p)]),
    standardErrors: Object.fromEntries(
      columns.names.map((name, i) => [name, Math.sqrt(Math.max(0, original[i * p + i]))]),
    ),
    clusters,
  };
}

function coefficientTests(
  { columns, end }: Description,
  { standardErrors }: CovarianceDocument,
  { degreesOfFreedom, level }: Basis,
): CoefficientTest[] {
  const estimates = coefficientsOf(columns, end.z);
  const reach = reachOf(level, degreesOfFreedom);
  const tests = columns.names.map((name, i) => {
    const statistic = estimates[i] / standardErrors[name];
    const pValue = twoSided(statistic, degreesOfFreedom);
    return { name, ...interval(estimates[i], standardErrors[name], reach), statistic, pValue };
  });
  const slopes = tests.slice(columns.intercept ? 1 : 0).map(({ pValue }) => pValue);
  const byHolm = holm(slopes);
  const byRate = benjaminiHochberg(slopes);
  return tests.map((test, i) => {
    const at = i - (columns.intercept ? 1 : 0);
    return { ...test, pHolm: byHolm[at] ?? null, pBenjaminiHochberg: byRate[at] ?? null };
  });
}

function cautionsOf(
  { specification, roster }: Grounds,
  isPenalised: boolean,
  { used }: Basis,
  covariances: readonly CovarianceDocument[],
): string[] {
  const out: string[] = [];
  const sites = new Set(roster.map(({ site }) => site)).size;
  const clusters = covariances.find(({ kind }) => kind === used)?.clusters ?? null;
  if (clusters !== null && clusters < CLUSTERS_LEAST)
    out.push(`Standard errors clustered over ${clusters} clusters are not sound: they need many more.`);
  if (covariances.some(({ kind }) => kind === 'site') && sites < CLUSTERS_LEAST)
    out.push(`Clustering by ${sites} sites is not sound: it is shown for comparison only.`);
  if (isPenalised && specification.report.debiased)
    out.push(
      'De-biased intervals hold for many rows and few large coefficients; with few rows they are too narrow, and the choice of λ is taken as given.',
    );
  return out;
}
