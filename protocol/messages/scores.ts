import { z } from 'zod';
import { count, finite, vector } from './vector.js';

/**
 * What inference at a point needs beside curvature: sums over the site's rows of products of scores. With s_r = w ℓ′ a
 * the score of row r in solver columns, and N the rows of all sites,
 *
 *     Σ s_r = N ∇φ ,   meat = (1/N) Σ_r s_r s_rᵀ ,   clustered meat = (1/N) Σ_c (Σ_{r in c} s_r)(Σ_{r in c} s_r)ᵀ .
 *
 * Clusters are the values of the specification's cluster column within the site.
 */
export const scoresWork = z.strictObject({
  work: z.literal('scores'),
  problem: count,
  point: vector,
  meat: z.boolean(),
  clustered: z.boolean(),
});

export const scoresAnswer = z.strictObject({
  work: z.literal('scores'),
  problem: count,
  gradient: vector,
  /** Packed lower triangles, where asked. */
  meat: vector.nullable(),
  clustered: vector.nullable(),
  clusterCount: count,
  /** Σ w (y − μ)² / V(μ), V the variance function of the loss. */
  pearson: finite,
});

export type ScoresWork = z.infer<typeof scoresWork>;
export type ScoresAnswer = z.infer<typeof scoresAnswer>;
