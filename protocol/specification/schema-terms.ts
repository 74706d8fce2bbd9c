import { z } from 'zod';
import {
  chosen,
  columnName,
  distinct,
  isMapping,
  levelText,
  mapping,
  notBuilt,
  refused,
  text,
} from './fields.js';
import type { IssueNote } from './issues.js';
import type { Transform } from './types.js';

/** A term as written, before names are given. A product's factors are names of other terms or their columns. */
export type WrittenTerm =
  | {
      readonly kind: 'numeric';
      readonly column: string;
      readonly unit: string | null;
      readonly transform: Transform;
    }
  | {
      readonly kind: 'levels';
      readonly column: string;
      readonly levels: readonly string[];
      readonly baseline: string | null;
    }
  | { readonly kind: 'product'; readonly factors: readonly string[] };

const transformAllowed = 'log, sqrt or {power: a number other than 0}';
const power = z
  .number({ error: 'a number other than 0' })
  .refine((value) => value !== 0, { error: 'a number other than 0' });

/** The first power is the column itself. */
const transform = chosen(
  (input): z.ZodType<Transform> =>
    isMapping(input)
      ? mapping({ power }).transform(
          (written): Transform => (written.power === 1 ? 'none' : { power: written.power }),
        )
      : z.enum(['log', 'sqrt', 'none'], { error: transformAllowed }),
);

const numericTerm = mapping({
  column: columnName,
  /** For reports. Default: none. */
  unit: text('a unit as text', 40).optional(),
  /** Default none: the column as it is. Logarithms are natural. */
  transform: transform.default('none'),
  /** Known here so that messages name it; a term that has it is a levels term. */
  levels: z.undefined().optional(),
  baseline: refused(
    'field-conflict',
    'Found a baseline; allowed: only beside levels.',
    'List the levels, or remove it.',
  ).optional(),
}).transform(
  (written): WrittenTerm => ({
    kind: 'numeric',
    column: written.column,
    unit: written.unit ?? null,
    transform: written.transform,
  }),
);

const numericOnly = (what: string) =>
  refused(
    'field-conflict',
    `Found ${what} beside levels; allowed: only for a numeric column.`,
    'Remove it, or the levels.',
  ).optional();

const levelsTerm = mapping({
  column: columnName,
  levels: distinct(levelText, 'a list of the levels, each once'),
  /** The level without a coefficient. Default: the first; null keeps a coefficient for every level. */
  baseline: levelText.nullable().optional(),
  unit: numericOnly('a unit'),
  transform: numericOnly('a transform'),
}).transform((written, context): WrittenTerm => {
  const { column, levels, baseline = levels[0] ?? null } = written;
  const complain = (field: string, message: string, remedy: string) => {
    const note: IssueNote = { code: 'field-value', remedy };
    context.addIssue({ code: 'custom', path: [field], message, params: { ...note } });
  };
  if (baseline !== null && !levels.includes(baseline)) {
    complain(
      'baseline',
      `Found "${baseline}"; allowed: one of the levels ${levels.join(', ')}, or null.`,
      'Name a level of the list.',
    );
  } else if (baseline !== null && levels.length === 1) {
    complain(
      'levels',
      'Found one level, which is the baseline; allowed: two levels or more.',
      'List the other levels, or write baseline: null.',
    );
  }
  return { kind: 'levels', column, levels, baseline };
});

const productTerm = mapping({
  product: distinct(columnName, 'a list of two or more columns of other terms', 2),
}).transform((written): WrittenTerm => ({ kind: 'product', factors: written.product }));

export const writtenTerm = chosen((input): z.ZodType<WrittenTerm> => {
  if (!isMapping(input)) return numericTerm;
  if ('spline' in input || 'knots' in input) return notBuilt('Spline terms are');
  if ('product' in input) return productTerm;
  return 'levels' in input ? levelsTerm : numericTerm;
});
