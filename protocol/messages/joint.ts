import { z } from 'zod';
import { count, finite, vector } from './vector.js';

/**
 * The joint problem as one site sees it: its own loss as it is, the sum of the others as a quadratic, and the penalty,
 *
 *     x = argmin φ(x) + ½ xᵀB x − cᵀx + Σ_j l1_j |x_j| + ½ l2_j x_j² ,
 *
 * a proximal problem in the others' metric, solved from `start`. For a site that is later than the others: one answer
 * is worth several rounds, and holds what a certificate at `start` needs of it.
 */
export const jointWork = z.strictObject({
  work: z.literal('joint'),
  problem: count,
  start: vector,
  /** B: packed lower triangle, p (p + 1) / 2 numbers. */
  curvature: vector,
  /** c, p numbers. */
  linear: vector,
  /** Weights of the penalty, p numbers each, none negative. */
  l1: vector,
  l2: vector,
});

/** φ, ∇φ and the packed curvature of φ at one point. */
const quadratic = z.strictObject({ value: finite, gradient: vector, curvature: vector });

export const jointAnswer = z.strictObject({
  work: z.literal('joint'),
  problem: count,
  /** At `start`. */
  start: quadratic,
  /** x, and φ there. */
  point: vector,
  end: quadratic,
  newtonSteps: count,
});

export type JointWork = z.infer<typeof jointWork>;
export type JointAnswer = z.infer<typeof jointAnswer>;
