import { z } from 'zod';
import type { FailureCode } from '../failure.js';
import type { IssueNote } from './issues.js';

/**
 * Kinds of field that both documents are made of. The error text of each is what it allows, as it is put after
 * "allowed:" in a message.
 */

/** A mapping with these fields and no others. */
export function mapping<S extends z.ZodRawShape>(shape: S) {
  const known = Object.keys(shape);
  const note: IssueNote = { code: 'field-unknown', known };
  const unknownField = z.custom<unknown>(() => false, { error: 'unknown field', params: { ...note } });
  return z.object(shape, { error: `a mapping with the fields ${known.join(', ')}` }).catchall(unknownField);
}

/** Always refused, with a sentence of its own. */
export function refused(code: FailureCode, message: string, remedy: string) {
  const note: IssueNote = { code, remedy };
  return z.custom<never>(() => false, { error: message, params: { ...note } });
}

/** A part of the format that this version knows and cannot do. `what` begins the sentence: "Spline terms are". */
export const notBuilt = (what: string, remedy = 'Leave it out.') =>
  refused('not-supported', `${what} part of the format, but this version cannot do them yet.`, remedy);

/** A field not built yet: it may be absent, or an empty list. */
export const notBuiltField = (what: string) =>
  chosen((input) =>
    Array.isArray(input) && input.length === 0 ? z.array(z.never()) : notBuilt(what),
  ).optional();

/** The schema that fits what was written, so that messages speak of the form the writer had in mind. */
export function chosen<S extends z.ZodType>(choose: (input: unknown) => S) {
  return z.unknown().transform((input, context): z.output<S> => {
    const result = choose(input).safeParse(input);
    if (result.success) return result.data;
    for (const issue of result.error.issues) context.issues.push({ ...issue, input } as z.core.$ZodRawIssue);
    return z.NEVER;
  });
}

export const isMapping = (input: unknown): input is Record<string, unknown> =>
  typeof input === 'object' && input !== null && !Array.isArray(input);

export const words = <const W extends readonly [string, ...string[]]>(...list: W) =>
  z.enum(list, { error: list.join(', ') });

/** Words of which some are refused as not built; `notYet` maps each to the subject of the sentence. */
export const wordsBuilt = <const W extends readonly [string, ...string[]]>(
  built: W,
  notYet: Readonly<Record<string, string>>,
) =>
  chosen((input): z.ZodType<W[number]> => {
    const subject = typeof input === 'string' && Object.hasOwn(notYet, input) ? notYet[input] : undefined;
    return subject === undefined ? words(...built) : notBuilt(subject, `Use one of ${built.join(', ')}.`);
  });

export const text = (allowed: string, lengthMost = 200) =>
  z
    .string({ error: allowed })
    .min(1, { error: allowed })
    .max(lengthMost, { error: `${allowed} of at most ${lengthMost} characters` });

export const columnName = text('the name of a column');

/** A value as it stands in a table. Numbers become text by value: 1 and 1.0 are '1'. */
export const levelText = z
  .union([z.string(), z.number(), z.boolean()], { error: 'a text or a number as it stands in the table' })
  .refine((value) => typeof value !== 'number' || !Number.isInteger(value) || Number.isSafeInteger(value), {
    error: 'a whole number up to 2^53, or the digits in quotes',
  })
  .transform(String);

const SITE_NAME = /^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$/;
const siteNameAllowed =
  'a site name of at most 64 letters, digits, hyphens, dots and underscores, the first a letter or digit';

export const siteName = z
  .union([z.string(), z.int()], { error: siteNameAllowed })
  .transform(String)
  .pipe(z.string().regex(SITE_NAME, { error: siteNameAllowed }));

export function numberFrom(least: number, most = Number.MAX_VALUE) {
  const error =
    most === Number.MAX_VALUE ? `a number of ${least} or more` : `a number from ${least} to ${most}`;
  return z.number({ error }).min(least, { error }).max(most, { error });
}

export function wholeFrom(least: number, most = Number.MAX_SAFE_INTEGER) {
  const range = most === Number.MAX_SAFE_INTEGER ? `of ${least} or more` : `from ${least} to ${most}`;
  const error = `a whole number ${range}`;
  return z.number({ error }).int({ error }).min(least, { error }).max(most, { error });
}

export const wholeOrAny = (least: number) =>
  chosen(
    (input): z.ZodType<number | 'any'> =>
      typeof input === 'string'
        ? z.literal('any', { error: `a whole number of ${least} or more, or any` })
        : wholeFrom(least),
  );

const UNIT_MS: Readonly<Record<string, number>> = { ms: 1, s: 1000, m: 60_000, h: 3_600_000 };
/** Timers of the platform hold no more than 2^31 − 1 ms. */
const DURATION_MOST_MS = 500 * 3_600_000;
const durationAllowed =
  'a whole number with its unit, such as 500ms, 30s, 5m or 2h, above 0 and at most 500h';

/** A duration, in milliseconds. */
export const duration = z.string({ error: durationAllowed }).transform((written, context): number => {
  const [, digits, unit = ''] = /^(\d{1,12})(ms|s|m|h)$/.exec(written) ?? [];
  const ms = Number(digits) * (UNIT_MS[unit] ?? Number.NaN);
  if (ms > 0 && ms <= DURATION_MOST_MS) return ms;
  context.issues.push({ code: 'custom', input: written, message: durationAllowed });
  return z.NEVER;
});

/** A list without repeats, `least` entries or more. */
export const distinct = <S extends z.ZodType<string>>(entry: S, allowed: string, least = 1) =>
  z
    .array(entry, { error: allowed })
    .min(least, { error: allowed })
    .superRefine((entries, context) => {
      const firsts = new Map<string, number>();
      for (const [index, value] of entries.entries()) {
        const first = firsts.get(value);
        if (first === undefined) {
          firsts.set(value, index);
          continue;
        }
        const note: IssueNote = { code: 'field-value', remedy: 'Keep one of the two.' };
        const message = `Found "${value}" a second time (entry ${index + 1} repeats entry ${first + 1}); allowed: each once.`;
        context.addIssue({ code: 'custom', path: [index], message, params: { ...note } });
      }
    });
