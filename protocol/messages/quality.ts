import { z } from 'zod';
import { count, finite, vector } from './vector.js';

/**
 * Asks how well a point fits the site's rows, as sums and binned counts. Cells with fewer rows than the site lets be seen
 * are left out and only counted. Leaves where the policy lists `residual-bins`.
 */
export const qualityWork = z.strictObject({
  work: z.literal('quality'),
  problem: count,
  point: vector,
  /** Ascending inner edges of the bins, on the scale of the linear predictor: one more bin than edges. */
  edges: vector,
  /** Packed inverse of the pooled curvature, for leverages h = w loss″ aᵀ H⁻¹ a / N; null: none are asked. */
  inverse: vector.nullable(),
  /** A leverage above this counts as high. */
  leverageHigh: finite,
});

export const qualityAnswer = z.strictObject({
  work: z.literal('quality'),
  problem: count,
  rows: count,
  /** Per bin: rows, Σ μ, Σ y; three zeros in a cell that is left out. */
  binRows: vector,
  binPredicted: vector,
  binObserved: vector,
  /** Rows in cells left out. */
  rowsSuppressed: count,
  /** Sum and sum of squares of the Pearson residuals √w (y − μ) / √V(μ). */
  pearsonSum: finite,
  pearsonSquares: finite,
  leverage: z.strictObject({ sum: finite, most: finite, rowsHigh: count }).nullable(),
  /** Counts (Poisson): rows with zero, and Σ exp(−μ). */
  zeros: z.strictObject({ observed: count, expected: finite }).nullable(),
});

export type QualityWork = z.infer<typeof qualityWork>;
export type QualityAnswer = z.infer<typeof qualityAnswer>;
