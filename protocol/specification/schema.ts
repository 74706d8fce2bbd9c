import { z } from 'zod';
import {
  chosen,
  columnName,
  distinct,
  duration,
  isMapping,
  levelText,
  mapping,
  notBuilt,
  notBuiltField,
  numberFrom,
  refused,
  siteName,
  wholeFrom,
  words,
  wordsBuilt,
} from './fields.js';
import { choose, report } from './schema-choose.js';
import { writtenTerm } from './schema-terms.js';
import type { LossForm } from './types.js';

/**
 * The fit specification as it is written, field by field. Parts of the format that this version cannot do are known
 * here and refused as `not-supported`; rules that span several fields are in `rules.ts`.
 */

const sites = chosen(
  (input): z.ZodType<string[] | { least: number }> =>
    isMapping(input)
      ? mapping({ least: wholeFrom(1, 10_000) })
      : distinct(siteName, 'a list of site names, or {least: how many sites}'),
);

const response = chosen((input) =>
  isMapping(input) && ('time' in input || 'event' in input)
    ? notBuilt('Responses with an event time are', 'Use a response of one column.')
    : mapping({
        column: columnName,
        /** The value that counts as 1. Default: the column is numeric, 0 or 1. */
        positive: levelText.optional(),
        classes: notBuiltField('Responses with several classes are'),
      }),
);

const LOSSES_NOT_BUILT: Readonly<Record<string, string>> = {
  gamma: 'Gamma losses are',
  quantile: 'Quantile losses are',
  multinomial: 'Multinomial losses are',
  hinge: 'Hinge losses are',
  cox: 'Cox losses are',
};

const lossAllowed = 'squared, logistic, poisson or {kind: huber, threshold: …}';
const thresholdAllowed = 'a number above 0, in units of the response';

const huberLoss = mapping({
  kind: z.literal('huber'),
  /** Residual, in units of the response, beyond which the loss grows in proportion. No default. */
  threshold: z.number({ error: thresholdAllowed }).gt(0, { error: thresholdAllowed }),
}).transform(({ kind, threshold }) => ({ kind, threshold }));

const loss = chosen((input): z.ZodType<LossForm> => {
  const kind = isMapping(input) ? input.kind : input;
  if (kind === 'huber') {
    const message = `The field "threshold" is missing; allowed: ${thresholdAllowed}.`;
    return isMapping(input)
      ? huberLoss
      : refused('field-missing', message, 'Write {kind: huber, threshold: …}.');
  }
  if (typeof kind === 'string' && Object.hasOwn(LOSSES_NOT_BUILT, kind)) {
    return notBuilt(LOSSES_NOT_BUILT[kind], `Use one of ${lossAllowed}.`);
  }
  return z
    .enum(['squared', 'logistic', 'poisson'], { error: lossAllowed })
    .transform((plain) => ({ kind: plain }));
});

const ratioAllowed = 'a number above 0 and below 1';

const path = mapping({
  /** Values of λ. Default 30. */
  count: wholeFrom(2, 1000).default(30),
  /** The last over the first. Default 1e-3, no unit. */
  ratio: z
    .number({ error: ratioAllowed })
    .gt(0, { error: ratioAllowed })
    .lt(1, { error: ratioAllowed })
    .default(1e-3),
}).transform(({ count, ratio }) => ({ count, ratio }));

/** A number, a list or a path: one fit each. */
const lambda = chosen((input): z.ZodType<number[] | { count: number; ratio: number }> => {
  if (isMapping(input)) return path;
  const allowed = 'a number of 0 or more, a list of 1 to 1000 of them, or a path {count: …, ratio: …}';
  if (!Array.isArray(input))
    return z
      .number({ error: allowed })
      .min(0, { error: allowed })
      .transform((value) => [value]);
  return z.array(numberFrom(0)).min(1, { error: allowed }).max(1000, { error: allowed });
});

const penalty = mapping({
  kind: wordsBuilt(['ridge', 'lasso', 'elastic-net'], {
    'group-lasso': 'Group penalties are',
    'sparse-group-lasso': 'Group penalties are',
    'total-variation': 'Total-variation penalties are',
    'nuclear-norm': 'Nuclear-norm penalties are',
  }),
  lambda,
  /** Share of the ℓ₁ part. Only for elastic-net, which has no default. */
  l1: numberFrom(0, 1).optional(),
  /** Default true: penalises b_j · sd_j, in units of the linear predictor; false: b_j itself. */
  scaled: z.boolean({ error: 'true or false' }).default(true),
  /** Multiplier by term or coefficient name. Default 1. */
  'per-term': z
    .record(z.string(), numberFrom(0), { error: 'a mapping from term or coefficient names to multipliers' })
    .default({}),
  groups: notBuiltField('Groups of coefficients are'),
  order: notBuiltField('Orders of coefficients are'),
});

const toleranceAllowed = 'a number above 0 and below 1';

const rounds = mapping({
  /** Relative gap of the optimality certificate at which a fit is solved. Default 1e-8, no unit. */
  tolerance: z
    .number({ error: toleranceAllowed })
    .gt(0, { error: toleranceAllowed })
    .lt(1, { error: toleranceAllowed })
    .default(1e-8),
  /** Most rounds of the solve stage. Default 300. */
  most: wholeFrom(1, 1_000_000).default(300),
  /** Highest rung of the ladder that may be used. Default `highest`: what every site allows. */
  rung: words('highest', 'pooled', 'curvature', 'sketched', 'proximal').default('highest'),
});

const QUORUM_ALLOWED = 'all, or a whole number of 1 or more';

const barrier = mapping({
  /** Time after which a site of a round counts as a straggler. Default 30s. */
  deadline: duration.default(30_000),
  /** Sites whose answers end a round; older answers stand in for the others'. Default all. */
  quorum: chosen(
    (input): z.ZodType<number | 'all'> =>
      typeof input === 'number' ? wholeFrom(1, 10_000) : z.literal('all', { error: QUORUM_ALLOWED }),
  ).default('all'),
  /** Most rounds that an answer which stands in may be old; a site with an older one is waited for. Default 0. */
  oldest: wholeFrom(0, 1_000_000).default(0),
  /** Time to wait for a missing site before `missing` applies. Default 30m. */
  patience: duration.default(1_800_000),
  /** What to do then: end the run, or fit again without the site. Default stop. */
  missing: words('stop', 'go-without').default('stop'),
});

const oneColumn = mapping({ column: columnName });

export const fitDocument = mapping({
  /** Version of the format. */
  commonfit: z.literal(1, { error: '1, the version of the format' }),
  /** Free text for lists and reports. Default: empty. */
  title: z.string({ error: 'a text' }).max(200, { error: 'a text of at most 200 characters' }).default(''),
  sites,
  /** Rows with a missing value in a used column: refuse the table, or drop and count them. Default refuse. */
  missing: words('refuse', 'drop').default('refuse'),
  response,
  loss,
  /** The offset is ln(exposure). Default: no offset. */
  exposure: oneColumn.optional(),
  /** The offset as it is, on the scale of the linear predictor. Default: no offset. */
  offset: oneColumn.optional(),
  /** Used as they are. Default: every weight 1. */
  weights: oneColumn.optional(),
  /** Default shared: one intercept for all sites, never penalised. per-site: one for each, which stays there. */
  intercept: words('shared', 'per-site', 'none').default('shared'),
  terms: z.array(writtenTerm, { error: 'a list of terms' }),
  /** They add up. Default: none. */
  penalty: z.array(penalty, { error: 'a list of penalties' }).default([]),
  constraints: notBuiltField('Constraints on coefficients are'),
  /** How one of the fits is chosen. Default: none is. */
  choose: choose.optional(),
  rounds: rounds.prefault({}),
  barrier: barrier.prefault({}),
  /** What is computed beside the coefficients. Default: nothing. */
  report: report.default([]),
});

export type FitDocument = z.output<typeof fitDocument>;
export type WrittenPenalty = FitDocument['penalty'][number];
