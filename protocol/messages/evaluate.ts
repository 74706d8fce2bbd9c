import { z } from 'zod';
import { LIMITS } from '../limits.js';
import { part } from './part.js';
import { count, finite, vector } from './vector.js';

/** How much is wanted at a point; each includes those before it. */
export const want = z.enum(['value', 'gradient', 'diagonal', 'curvature']);

/**
 * A quadratic answer: value, gradient and curvature of the site's φ at the points asked. With `ownFit` the site also
 * returns the quadratic at its own fit held near `points[ownFit.at]`:
 * x = argmin φ(x) + ½ · hold · ‖x − point‖²_D, D the site's own floored diagonal curvature at that point. With `sketch`
 * it returns the products of its curvature at `points[sketch.at]` with `columns` directions.
 */
export const evaluateWork = z.strictObject({
  work: z.literal('evaluate'),
  problem: count,
  part,
  points: z
    .array(z.strictObject({ point: vector, want }))
    .min(1)
    .max(LIMITS.batchMost),
  ownFit: z.strictObject({ at: count, hold: finite.positive() }).nullable(),
  /** S, p numbers a direction, one direction after the other. */
  sketch: z.strictObject({ at: count, directions: vector, columns: count.min(1) }).nullable(),
});

export const evaluateAnswer = z.strictObject({
  work: z.literal('evaluate'),
  problem: count,
  points: z
    .array(
      z.strictObject({
        value: finite,
        gradient: vector.nullable(),
        /** Diagonal of the curvature, p numbers. */
        diagonal: vector.nullable(),
        /** Packed lower triangle of the curvature, p (p + 1) / 2 numbers. */
        curvature: vector.nullable(),
      }),
    )
    .min(1)
    .max(LIMITS.batchMost),
  /** Packed curvature H(x) and H(x) x − ∇φ(x) at the site's own fit x. */
  ownFit: z.strictObject({ curvature: vector, linear: vector }).nullable(),
  /** H(point) S, in the order of the directions. */
  sketch: vector.nullable(),
});

export type Want = z.infer<typeof want>;
export type EvaluateWork = z.infer<typeof evaluateWork>;
export type EvaluateAnswer = z.infer<typeof evaluateAnswer>;
