import type { ReportInput } from '../../coordinator/report/page/input.js';
import { NO_FITS } from '../../coordinator/run/documents.js';
import type { LogEvent, RoundEvent } from '../../coordinator/run/log-event.js';
import type { FitDocument, ResultDocument } from '../../coordinator/run/result.js';
import type {
  ChoiceDocument,
  CoefficientTest,
  ComparisonDocument,
  FitQualityDocument,
  Heterogeneity,
  InferenceDocument,
  Interval,
} from '../../coordinator/run/result-parts.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';

/** Made-up results of the pipe-breaks scenario with every part filled in, for pages to be looked at and tested. */

const SITES = ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'] as const;
const ROWS = [18_204, 9_713, 26_950, 4_118] as const;

const BREAKS = `commonfit: 1
title: Pipe breaks per kilometre-year
sites: [harrowmere, lindell-bay, castlefen, oakhythe]
missing: drop
response: {column: breaks}
loss: poisson
exposure: {column: km_years}
terms:
  - {column: age_years, unit: year}
  - {column: diameter_mm, unit: mm, transform: log}
  - {column: material, levels: [pvc, ductile-iron, cast-iron, steel], baseline: pvc}
  - {column: soil, levels: [sand, loam, clay], baseline: sand}
  - {column: pressure_bar, unit: bar}
report: [covariance, {sandwich: {cluster: zone}}, term-tests, {profile: [age_years]}, margins, compare-sites, fit-quality]
rounds: {tolerance: 1e-8}
barrier: {deadline: 30s}
`;

const PATH = BREAKS.replace(
  /report:.*\n/,
  `penalty:
  - {kind: lasso, lambda: {count: 30, ratio: 1e-3}}
choose: {folds: 5, seed: 7, rule: one-standard-error}
report: [covariance, debiased, compare-sites, fit-quality]
`,
);

const ESTIMATES: readonly (readonly [string, number, number])[] = [
  ['(intercept)', -3.417, 0.182],
  ['age_years', 0.0183, 0.0011],
  ['diameter_mm', -0.412, 0.033],
  ['material=ductile-iron', 0.286, 0.071],
  ['material=cast-iron', 0.914, 0.062],
  ['material=steel', 0.447, 0.088],
  ['soil=loam', 0.052, 0.047],
  ['soil=clay', 0.318, 0.044],
  ['pressure_bar', 0.0412, 0.0123],
];

/** Numbers that look drawn and are the same each time (Park and Miller 1988). */
function sequence(seed: number): () => number {
  let state = seed;
  return () => {
    state = (state * 48_271) % 2_147_483_647;
    return state / 2_147_483_647;
  };
}

const wald = (estimate: number, standardError: number): Interval => ({
  estimate,
  standardError,
  lower: estimate - 1.96 * standardError,
  upper: estimate + 1.96 * standardError,
});

function testOf([name, estimate, standardError]: readonly [string, number, number]): CoefficientTest {
  const statistic = estimate / standardError;
  const pValue = Math.min(1, Math.exp(-0.717 * Math.abs(statistic) - 0.416 * statistic ** 2));
  const adjusted = name === '(intercept)' ? null : Math.min(1, pValue * 3);
  return {
    name,
    ...wald(estimate, standardError),
    statistic,
    pValue,
    pHolm: adjusted,
    pBenjaminiHochberg: adjusted,
  };
}

function inferenceOf(estimates: readonly (readonly [string, number, number])[]): InferenceDocument {
  const order = estimates.map(([name]) => name);
  return {
    level: 0.95,
    degreesOfFreedom: null,
    dispersion: { kind: 'fixed', value: 1 },
    used: 'cluster-g1',
    covariances: [
      {
        kind: 'cluster-g1',
        order,
        covariance: estimates.map(([, , se], i) => estimates.map((_, j) => (i === j ? se * se : 0))),
        standardErrors: Object.fromEntries(estimates.map(([name, , se]) => [name, se])),
        clusters: 212,
      },
    ],
    coefficients: estimates.map(testOf),
    terms: [
      ['age_years', ['age_years'], 268.4, 1],
      ['diameter_mm', ['diameter_mm'], 151.2, 1],
      ['material', ['material=ductile-iron', 'material=cast-iron', 'material=steel'], 231.7, 3],
      ['soil', ['soil=loam', 'soil=clay'], 58.9, 2],
      ['pressure_bar', ['pressure_bar'], 11.1, 1],
    ].map(([term, coefficients, statistic, degreesOfFreedom], at) => ({
      term: term as string,
      coefficients: coefficients as string[],
      statistic: statistic as number,
      degreesOfFreedom: degreesOfFreedom as number,
      pValue: at === 4 ? 0.00086 : 1e-12,
      pHolm: at === 4 ? 0.00086 : 5e-12,
      pBenjaminiHochberg: at === 4 ? 0.00086 : 2e-12,
    })),
    profile: [{ name: 'age_years', lower: 0.01614, upper: 0.02047 }],
    debiased: [],
    marginalMeans: [
      ['pvc', 0.061, 0.003],
      ['ductile-iron', 0.082, 0.005],
      ['cast-iron', 0.153, 0.006],
      ['steel', 0.096, 0.007],
    ].map(([level, mean, se]) => ({
      term: 'material',
      level: String(level),
      ...wald(Number(mean), Number(se)),
    })),
    marginalEffects: [
      { term: 'age_years', unit: 'year', ...wald(0.00187, 0.00013) },
      { term: 'pressure_bar', unit: 'bar', ...wald(0.0042, 0.0013) },
    ],
    cautions: [
      'The clustered covariance rests on 212 clusters within sites: with few clusters its intervals are too short.',
    ],
  };
}

function comparisonOf(
  estimates: readonly (readonly [string, number, number])[],
  sites: readonly string[],
  rows: readonly number[],
): ComparisonDocument {
  const next = sequence(41);
  const total = rows.reduce((a, b) => a + b, 0);
  const own = sites.map((_, i) =>
    Object.fromEntries(
      estimates.map(([name, value, se]) => {
        const spread = se * Math.sqrt(total / rows[i]);
        const shift = name === 'soil=clay' && i === 2 ? -0.42 : (next() - 0.5) * 2.2 * spread;
        return [name, wald(value + shift, spread)];
      }),
    ),
  );
  const heterogeneity = estimates.map(([name, value]): Heterogeneity => {
    const weights = own.map((one) => one[name].standardError ** -2);
    const sum = weights.reduce((a, b) => a + b, 0);
    const mean = own.reduce((acc, one, i) => acc + weights[i] * one[name].estimate, 0) / sum;
    const q = own.reduce((acc, one, i) => acc + weights[i] * (one[name].estimate - mean) ** 2, 0);
    const df = sites.length - 1;
    return {
      name,
      sites: sites.length,
      q,
      degreesOfFreedom: df,
      pValue: Math.min(1, Math.exp(-q / 2) * (1 + q / 2)),
      i2: Math.max(0, (q - df) / q),
      tau2: Math.max(0, (q - df) / sum),
      average: wald(mean, sum ** -0.5),
      averageMinusCommon: mean - value,
    };
  });
  return {
    sites: sites.map((site, i) => ({
      site,
      rowsUsed: rows[i],
      reason: null,
      own: own[i],
      devianceCommon: rows[i] * 0.412,
      devianceOwn: rows[i] * 0.412 - 11 - 9 * i,
      informationShare: Object.fromEntries(estimates.map(([name]) => [name, rows[i] / total])),
      leftOut: Object.fromEntries(
        estimates.map(([name, value, se]) => {
          const change = name === 'soil=clay' && i === 2 ? 0.19 : (next() - 0.5) * se;
          return [name, { estimate: value + change, change, changeInStandardErrors: change / se }];
        }),
      ),
    })),
    heterogeneity,
    commonModel: { statistic: 61.4, degreesOfFreedom: (sites.length - 1) * estimates.length, pValue: 0.0005 },
    words: [
      'The sites do not share one model: a model of their own at every site fits better than chance explains (p = less than 0.001).',
      'The sites differ in soil=clay: the common value is an average over different effects. A product with the site, or separate models, would show them.',
      'Without castlefen, soil=clay would move by more than a standard error: look at its table first; leaving it out is a choice to be stated.',
    ],
  };
}

const QUALITY: FitQualityDocument = {
  deviance: 24_317.4,
  nullDeviance: 29_118.2,
  devianceExplained: 0.1649,
  crossValidatedDeviance: 0.4141,
  calibration: {
    bins: [0.012, 0.024, 0.038, 0.055, 0.074, 0.098, 0.131, 0.178, 0.257, 0.438].map((predicted, at) => ({
      rows: 5898 - 130 * at,
      predicted,
      observed: predicted * (1 + 0.06 * Math.sin(at * 1.7)),
    })),
    rowsSuppressed: 14,
  },
  ranking: null,
  residuals: SITES.map((site, at) => ({
    site,
    rows: ROWS[at],
    mean: [0.011, -0.024, 0.003, 0.047][at],
    sd: 1.02 + 0.05 * at,
  })),
  leverage: SITES.map((site, at) => ({
    site,
    mean: 9 / 58_985,
    most: 0.0021 + 0.0008 * at,
    rowsHigh: [611, 402, 870, 233][at],
  })),
  pearsonDispersion: 1.137,
  zeros: { observed: 54_110, expected: 53_871.4 },
  words: [
    'The fit explains 16 % of the deviance.',
    'Counts spread somewhat more than a Poisson model says (dispersion 1.14): trust the sandwich rather than the model covariance.',
  ],
};

function roundEvents(gaps: readonly number[], site: (at: number) => string): RoundEvent[] {
  return gaps.map((gap, at) => ({
    event: 'round',
    stage: 'solve',
    round: at + 1,
    roundsMost: 200,
    rung: 'curvature',
    purpose: at === 0 ? 'start' : at === gaps.length - 1 ? 'certificate' : 'trial points',
    fitsOpen: at === gaps.length - 1 ? 0 : 1,
    fitsTotal: 1,
    relativeGap: at === 0 ? null : gap,
    gapMeasured: at !== 1,
    tolerance: 1e-8,
    primalResidual: null,
    dualResidual: null,
    objective: 0.2311 + gap,
    tookMs: 180 + 40 * at,
    standIns: at === 2 ? [{ site: 'lindell-bay', round: 2 }] : [],
    slowest: { site: site(at), ms: 160 + 37 * at },
    numbersUp: 268,
    numbersDown: 44,
    at: `2031-05-04T10:15:${String(10 + at).padStart(2, '0')}.000Z`,
  }));
}

function specificationOf(text: string): FitSpecification {
  const parsed = parseFitSpecification(text, 'breaks.fit.yaml');
  if (!parsed.ok) throw new Error(parsed.failures.map(({ message }) => message).join('\n'));
  return parsed.value;
}

function fitOf(
  estimates: readonly (readonly [string, number, number])[],
  lambda: number | null = null,
): FitDocument {
  const [, ...slopes] = estimates;
  return {
    lambda,
    outcome: 'solved',
    reason: null,
    intercept: estimates[0][1],
    coefficients: Object.fromEntries(slopes.map(([name, value]) => [name, value])),
    dropped: [],
    objective: 0.231_144_7,
    loss: 0.231_144_7,
    penalty: 0,
    deviance: 24_317.4,
    certificate: { kind: 'measured', gap: 7.2e-13, relativeGap: 3.1e-12, kkt: 4.4e-8 },
    rounds: 6,
    rung: 'curvature',
  };
}

const DIGEST = '5f0c2e7d94b1a8366d1f0be2c47a59e3b8d20716fa4c93e5d7812b6c3f9045ae';

function resultOf(specification: FitSpecification, parts: Partial<ResultDocument>): ResultDocument {
  return {
    format: 1,
    outcome: 'solved',
    reason: null,
    title: specification.title,
    specification: DIGEST,
    software: 'commonfit 0.1.0',
    sites: SITES.map((site, at) => ({
      site,
      rowsUsed: ROWS[at],
      rowsDropped: [31, 0, 112, 4][at],
      kernel: at === 3 ? 'typescript 1' : 'typescript 1, 2 threads',
    })),
    without: [],
    rowsTotal: ROWS.reduce((a, b) => a + b, 0),
    rung: 'curvature',
    rungReason: 'every site lets curvature leave, and three matrices are enough',
    tolerance: 1e-8,
    ...NO_FITS,
    chosen: 0,
    notes: [
      'oakhythe has no rows with material=steel: its rows say nothing about that coefficient',
      'diameter_mm reaches from 32 to 1200 at castlefen and from 50 to 400 elsewhere',
    ],
    rounds: 6,
    numbersSent: SITES.map((site, at) => ({ site, up: 1184 + (at === 2 ? 90 : 0), down: 263 })),
    ...parts,
  };
}

function inputOf(
  specification: FitSpecification,
  result: ResultDocument,
  events: readonly LogEvent[],
): ReportInput {
  return {
    specification,
    result,
    events,
    run: '20310504-101500-4f6c2a91',
    submittedAt: '2031-05-04T10:15:00.000Z',
    endedAt: '2031-05-04T10:15:19.000Z',
    node: 'v20.19.2',
    journal: { file: 'journal', sha256: 'c1a7'.repeat(16) },
  };
}

const GAPS = [1, 0.21, 3.4e-2, 8.8e-4, 6.1e-7, 3.1e-12];

/** Unpenalised, every part there. */
export function breaksReport(parts: Partial<ResultDocument> = {}): ReportInput {
  const specification = specificationOf(BREAKS);
  const result = resultOf(specification, {
    fits: [fitOf(ESTIMATES)],
    inference: inferenceOf(ESTIMATES),
    comparison: comparisonOf(ESTIMATES, SITES, ROWS),
    fitQuality: QUALITY,
    ...parts,
  });
  const resumed: LogEvent = { event: 'resumed', round: 3, at: '2031-05-04T10:15:14.000Z' };
  return inputOf(specification, result, [...roundEvents(GAPS, (at) => SITES[at % 3]), resumed]);
}

/** A lasso path of 30 with five folds, de-biased intervals and one part left out. */
export function pathReport(): ReportInput {
  const specification = specificationOf(PATH);
  const lambdas = Array.from({ length: 30 }, (_, at) => 0.21 * 1e-3 ** (at / 29));
  const shrunk = (lambda: number) =>
    ESTIMATES.map(([name, value, se], at): [string, number, number] => {
      const size = at === 0 ? 0 : Math.max(0, Math.abs(value) - lambda * (1 + at / 2));
      return [name, at === 0 ? value : Math.sign(value) * size, se];
    });
  const fits = lambdas.map((lambda) => fitOf(shrunk(lambda), lambda));
  const mean = lambdas.map(
    (lambda, at) => 0.414 + 0.08 * (1 - 1 / (1 + 9 * lambda)) + 3e-6 * Math.max(0, at - 20) ** 2,
  );
  const minimum = mean.indexOf(Math.min(...mean));
  const choice: ChoiceDocument = {
    rule: 'one-standard-error',
    chosen: minimum - 7,
    minimum,
    lambdas,
    nonzero: fits.map(
      ({ coefficients }) => Object.values(coefficients).filter((value) => value !== 0).length,
    ),
    crossValidation: {
      folds: [1, 2, 3, 4, 5].map((fold) => ({ fold: String(fold), rows: 11_797 })),
      foldLoss: [-2, -1, 0, 1, 2].map((shift) => mean.map((value) => value + shift * 0.004)),
      mean,
      standardError: mean.map(() => 0.0041),
    },
    criterion: null,
  };
  const result = resultOf(specification, {
    fits,
    chosen: choice.chosen,
    choice,
    inference: {
      ...inferenceOf(ESTIMATES),
      used: 'model',
      coefficients: [],
      terms: [],
      profile: [],
      marginalMeans: [],
      marginalEffects: [],
      debiased: ESTIMATES.slice(1).map((one) => ({ ...testOf(one), name: one[0] })),
      cautions: ['De-biased intervals are approximate: they lean on sparsity and on many rows.'],
    },
    comparison: comparisonOf(ESTIMATES.slice(1), SITES, ROWS),
    fitQuality: {
      ...QUALITY,
      calibration: null,
      ranking: {
        area: 0.741,
        curve: Array.from({ length: 40 }, (_, at) => ({ falseShare: at / 39, trueShare: (at / 39) ** 0.45 })),
      },
    },
    omitted: [{ part: 'calibration', reason: 'lindell-bay lets no residual-bins leave' }],
    rounds: 8,
  });
  return inputOf(
    specification,
    result,
    roundEvents([...GAPS.slice(0, 5), 1e-7, 2e-9, 3.1e-12], (at) => SITES[at % 4]),
  );
}

/** As large as a report gets: so many coefficients and sites, all parts there. */
export function largeReport(coefficients: number, siteCount: number): ReportInput {
  const next = sequence(7);
  const estimates: [string, number, number][] = [['(intercept)', -3.2, 0.2]];
  for (let at = 1; at <= coefficients; at++)
    estimates.push([`district=water-supply-district-${at}`, (next() - 0.5) * 1.4, 0.05 + 0.2 * next()]);
  const sites = Array.from({ length: siteCount }, (_, at) => `utility-of-district-${at + 1}`);
  const rows = sites.map((_, at) => 4000 + 900 * at);
  const base = breaksReport();
  const gaps = Array.from({ length: 200 }, (_, at) => 10 ** (-at / 22));
  return {
    ...base,
    events: roundEvents(gaps, (at) => sites[at % sites.length]),
    result: {
      ...base.result,
      sites: sites.map((site, at) => ({ site, rowsUsed: rows[at], rowsDropped: 0, kernel: 'typescript 1' })),
      rowsTotal: rows.reduce((a, b) => a + b, 0),
      numbersSent: sites.map((site) => ({ site, up: 61_000, down: 4100 })),
      fits: [fitOf(estimates)],
      inference: inferenceOf(estimates),
      comparison: comparisonOf(estimates, sites, rows),
    },
  };
}
