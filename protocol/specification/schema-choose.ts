import { z } from 'zod';
import { LIMITS } from '../limits.js';
import {
  chosen,
  columnName,
  distinct,
  isMapping,
  mapping,
  refused,
  text,
  wholeFrom,
  words,
} from './fields.js';
import type { IssueNote } from './issues.js';
import type { Choice, Folds } from './types.js';

/** How a fit is chosen (`choose`) and what is computed of it (`report`), as written. */

const foldsAllowed = `a whole number from 2 to ${LIMITS.foldsMost}, or {column: the name of a column}`;

const folds = chosen(
  (input): z.ZodType<number | { column: string }> =>
    isMapping(input)
      ? mapping({ column: columnName }).transform(({ column }) => ({ column }))
      : z
          .number({ error: foldsAllowed })
          .int({ error: foldsAllowed })
          .min(2, { error: foldsAllowed })
          .max(LIMITS.foldsMost, { error: foldsAllowed }),
);

/** Seeds are 32 bits wide. */
const SEED_MOST = 2 ** 32 - 1;

const byFolds = mapping({
  folds,
  /** Of the hash that deals rows to folds. Default 1. */
  seed: wholeFrom(0, SEED_MOST).optional(),
  /** Default one-standard-error: the largest λ whose held-out loss is within one standard error of the least. */
  rule: words('one-standard-error', 'minimum').default('one-standard-error'),
}).transform((written, context): Choice => {
  const { folds: by, seed, rule } = written;
  if (typeof by !== 'number' && seed !== undefined) {
    const note: IssueNote = { code: 'field-conflict', remedy: 'Remove it, or give folds as a number.' };
    const message = `Found a seed with folds by the column "${by.column}"; allowed: only with a number of folds.`;
    context.addIssue({ code: 'custom', path: ['seed'], message, params: { ...note } });
  }
  const dealt: Folds =
    typeof by === 'number'
      ? { kind: 'hash', folds: by, seed: seed ?? 1 }
      : { kind: 'column', column: by.column };
  return { kind: 'folds', by: dealt, rule };
});

const onlyWithFolds = (field: string) =>
  refused(
    'field-conflict',
    `Found ${field} beside a criterion; allowed: only with folds.`,
    'Choose by folds or by a criterion.',
  ).optional();

const byCriterion = mapping({
  criterion: words('aic', 'bic', 'extended-bic'),
  folds: onlyWithFolds('folds'),
  seed: onlyWithFolds('a seed'),
  rule: onlyWithFolds('a rule'),
}).transform(({ criterion }): Choice => ({ kind: 'criterion', criterion }));

const neither = refused(
  'field-missing',
  'Found neither folds nor a criterion; allowed: {folds: …} or {criterion: aic, bic or extended-bic}.',
  'Say how a fit is chosen, for instance {folds: 5}.',
);

export const choose = chosen((input): z.ZodType<Choice> => {
  if (!isMapping(input)) return byFolds;
  if ('criterion' in input) return byCriterion;
  const known = ['folds', 'seed', 'rule', 'criterion'];
  const slip = Object.keys(input).some((field) => !known.includes(field));
  return 'folds' in input || slip ? byFolds : neither;
});

/** One entry of `report` as written. */
export type WrittenPart =
  | {
      readonly part: 'covariance' | 'term-tests' | 'margins' | 'debiased' | 'compare-sites' | 'fit-quality';
    }
  | { readonly part: 'sandwich'; readonly cluster: string | null }
  | { readonly part: 'profile'; readonly names: readonly string[] };

const PARTS = [
  'covariance',
  'sandwich',
  'term-tests',
  'profile',
  'debiased',
  'margins',
  'compare-sites',
  'fit-quality',
] as const;

const sandwich = mapping({ sandwich: mapping({ cluster: columnName }) }).transform(
  (written): WrittenPart => ({ part: 'sandwich', cluster: written.sandwich.cluster }),
);

const profileAllowed = 'a list of terms or coefficients, each once';

const profile = mapping({
  profile: distinct(text('the name of a term or a coefficient'), profileAllowed),
}).transform((written): WrittenPart => ({ part: 'profile', names: written.profile }));

/** For a mapping that is neither of the two: each of its fields is unknown. */
const detailed = mapping({ sandwich: z.never().optional(), profile: z.never().optional() }).transform(
  (): WrittenPart => z.NEVER,
);

const plainPart = z.enum(PARTS, { error: PARTS.join(', ') }).transform((part, context): WrittenPart => {
  if (part === 'sandwich') return { part, cluster: null };
  if (part !== 'profile') return { part };
  const note: IssueNote = { code: 'field-missing', remedy: 'Write profile: [NAME, …].' };
  const message = 'Found profile without names; allowed: profile: [NAME, …].';
  context.addIssue({ code: 'custom', message, params: { ...note } });
  return z.NEVER;
});

const part = chosen((input): z.ZodType<WrittenPart> => {
  if (!isMapping(input) || Object.keys(input).length === 0) return plainPart;
  if ('sandwich' in input) return sandwich;
  return 'profile' in input ? profile : detailed;
});

export const report = z
  .array(part, { error: `a list of ${PARTS.join(', ')}` })
  .superRefine((parts, context) => {
    parts.forEach(({ part: name }, index) => {
      const first = parts.findIndex((other) => other.part === name);
      if (first === index) return;
      const note: IssueNote = { code: 'field-value', remedy: 'Keep one of the two.' };
      const message = `Found ${name} a second time (entry ${index + 1} repeats entry ${first + 1}); allowed: each once.`;
      context.addIssue({ code: 'custom', path: [index], message, params: { ...note } });
    });
  });
