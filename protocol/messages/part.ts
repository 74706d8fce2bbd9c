import { z } from 'zod';

/**
 * The rows of a site that a problem is about: all of them (null), or, of one fold of a cross-validation, those outside it
 * (`training`) or in it (`held-out`). A site that has no row there answers with zeros.
 */
export const part = z
  .strictObject({ fold: z.string().min(1).max(200), side: z.enum(['training', 'held-out']) })
  .nullable();

export type Part = z.infer<typeof part>;
