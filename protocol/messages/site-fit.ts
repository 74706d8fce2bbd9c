import { z } from 'zod';
import { LIMITS } from '../limits.js';
import { count, finite, vector } from './vector.js';

/**
 * Asks for the site's own fit: argmin φ + the ridge that keeps solver columns without spread at the site at zero, no
 * other penalty. Leaves where the policy lists `site-estimates`.
 */
export const siteFitWork = z.strictObject({
  work: z.literal('site-fit'),
  problem: count,
  /** Where the site's solver starts. */
  start: vector,
});

export const siteFitAnswer = z.strictObject({
  work: z.literal('site-fit'),
  problem: count,
  /** Null with a reason where the site's rows do not determine a fit. */
  fit: z
    .strictObject({
      point: vector,
      /** φ at the point. */
      value: finite,
      /** Packed curvature of φ at the point. */
      curvature: vector,
      /** Solver columns that the site's rows do not determine; their entries are zero. */
      undetermined: z.array(count).max(LIMITS.coefficientsMost),
      /** Σ w (y − μ)² / V(μ) over the site's rows at the point. */
      pearson: finite,
    })
    .nullable(),
  reason: z.string().max(4000).nullable(),
});

export type SiteFitWork = z.infer<typeof siteFitWork>;
export type SiteFitAnswer = z.infer<typeof siteFitAnswer>;
