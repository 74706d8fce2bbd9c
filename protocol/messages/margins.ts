import { z } from 'zod';
import { LIMITS } from '../limits.js';
import { count, finite, vector } from './vector.js';

/**
 * Asks for mean predictions with a term set to something else in every row: sums over the site's rows of the mean μ and
 * of its derivative by the solver columns, μ′ a, which give margins with intervals by the delta method.
 */
export const marginsWork = z.strictObject({
  work: z.literal('margins'),
  problem: count,
  point: vector,
  settings: z
    .array(
      z.discriminatedUnion('set', [
        /** A column of levels, at one level in every row. */
        z.strictObject({ set: z.literal('level'), column: z.string(), level: z.string() }),
        /** The derivative of μ by a numeric column, as it is in the table, in place of μ itself. */
        z.strictObject({ set: z.literal('slope'), column: z.string() }),
      ]),
    )
    .min(1)
    .max(LIMITS.batchMost),
});

export const marginsAnswer = z.strictObject({
  work: z.literal('margins'),
  problem: count,
  rows: count,
  /** In the order of the settings. */
  settings: z
    .array(z.strictObject({ sum: finite, gradient: vector }))
    .min(1)
    .max(LIMITS.batchMost),
});

export type MarginsWork = z.infer<typeof marginsWork>;
export type MarginsAnswer = z.infer<typeof marginsAnswer>;
