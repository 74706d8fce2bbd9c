import { z } from 'zod';
import { LIMITS } from '../limits.js';
import { count, vector } from './vector.js';

/**
 * How design columns become solver columns: θ_j multiplies (x_j − center_j) / scale_j. `kept` are the design columns
 * (indices into the survey's `columns`) that take part; the rest have no spread anywhere.
 */
export const scaling = z.strictObject({
  /** N: rows used over all sites; every φ is divided by it. */
  rowCountTotal: count.min(1),
  kept: z.array(count).max(LIMITS.coefficientsMost),
  center: vector,
  scale: vector,
});

/** Tells a site of a run, once per link before its first ask, and again when the scaling is known. No answer. */
export const prepare = z.strictObject({
  kind: z.literal('prepare'),
  run: z.string().min(1).max(64),
  /** The canonical form of the fit specification, whose SHA-256 is `digest` (hex). */
  specification: z.string(),
  digest: z.string().length(64),
  scaling: scaling.nullable(),
});

/** Tells a site that a run is over: it may forget it. No answer. */
export const runEnd = z.strictObject({
  kind: z.literal('run-end'),
  run: z.string().min(1).max(64),
  outcome: z.string().max(40),
});

export type Scaling = z.infer<typeof scaling>;
export type Prepare = z.infer<typeof prepare>;
export type RunEnd = z.infer<typeof runEnd>;
