import { z } from 'zod';
import { vector } from './vector.js';

/** Squared loss: asks for the triangular factor R of the site's √w · [X, y − offset] (QR, rows scaled by 1/√N). */
export const factorWork = z.strictObject({ work: z.literal('factor') });

export const factorAnswer = z.strictObject({
  work: z.literal('factor'),
  /** Packed upper triangle of R, (p + 1)(p + 2) / 2 numbers, column by column: (i ≤ j, j) at j (j + 1) / 2 + i. */
  factor: vector,
});

export type FactorWork = z.infer<typeof factorWork>;
export type FactorAnswer = z.infer<typeof factorAnswer>;
