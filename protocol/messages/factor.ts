import { z } from 'zod';
import { LIMITS } from '../limits.js';
import { vector } from './vector.js';

/**
 * Squared loss: asks for triangular factors R of the site's √w · [X, y − offset] (QR, rows scaled by 1/√N): one of the
 * rows in each fold named, or, where none is named, one of all rows.
 */
export const factorWork = z.strictObject({
  work: z.literal('factor'),
  folds: z.array(z.string().min(1).max(200)).max(LIMITS.foldsMost),
});

export const factorAnswer = z.strictObject({
  work: z.literal('factor'),
  /** Packed upper triangles of R, (p + 1)(p + 2) / 2 numbers, column by column: (i ≤ j, j) at j (j + 1) / 2 + i. */
  factors: z.array(vector).min(1).max(LIMITS.foldsMost),
});

export type FactorWork = z.infer<typeof factorWork>;
export type FactorAnswer = z.infer<typeof factorAnswer>;
