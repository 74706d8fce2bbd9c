import { z } from 'zod';

/** A float64 vector: RFC 8746 typed array (tag 86) on the wire, `Float64Array` in memory, every element finite. */
export const vector: z.ZodType<Float64Array> = z.instanceof(Float64Array).refine(
  (values) => {
    for (let i = 0; i < values.length; i++) if (!Number.isFinite(values[i])) return false;
    return true;
  },
  { error: 'a vector holds a value that is not finite', params: { failure: 'number-not-finite' } },
);

export const finite = z.number().refine(Number.isFinite, { error: 'the number is not finite' });
export const count = z.int().min(0);

/** Numbers in the packed lower triangle of a symmetric p × p matrix, row by row: (i, j ≤ i) at i (i + 1) / 2 + j. */
export const packedLength = (p: number): number => (p * (p + 1)) / 2;
