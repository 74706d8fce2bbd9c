import { z } from 'zod';
import { LIMITS } from '../limits.js';
import { count, finite, vector } from './vector.js';

/** Asks what a site would bring: rows, pooled moments of every design column, the response, and what may leave. */
export const surveyWork = z.strictObject({ work: z.literal('survey') });

/** Kinds of answer that a custodian may let leave. */
export const LEAVE_KINDS = [
  'counts',
  'moments',
  'proximal',
  'gradients',
  'curvature',
  'site-estimates',
  'sketches',
  'residual-bins',
] as const;
export type LeaveKind = (typeof LEAVE_KINDS)[number];

/** What a site's policy lets leave, so that the coordinator can choose the rung. `null` means no limit. */
export const allowance = z.strictObject({
  leave: z.array(z.enum(LEAVE_KINDS)),
  curvatureMost: count.nullable(),
  numbersMost: count.nullable(),
  roundsMost: count.nullable(),
});

/** Counts, moments and sums over some rows of a site. */
const moments = {
  rowsUsed: count,
  /** Per design column, over the rows used: mean, and sum of squares about that mean. Unweighted. */
  mean: vector,
  centredSquares: vector,
  response: z.strictObject({
    /** Σ w, Σ w y and Σ w exp(offset) over the rows used. */
    weightSum: finite,
    weightedSum: finite,
    exposureSum: finite,
    least: finite,
    most: finite,
    /** Σ w · loss(y, η at its best for that row alone): turns a loss into a deviance. */
    saturatedLoss: finite,
  }),
};

export const surveyAnswer = z.strictObject({
  work: z.literal('survey'),
  ...moments,
  /** Rows left out because a used column has no value (`missing: drop`). */
  rowsDropped: count,
  /** Names of the design columns, intercept not among them, in the order of the vectors. */
  columns: z.array(z.string()).max(LIMITS.coefficientsMost),
  /** The same over the rows in each fold of the specification's cross-validation, in order of their labels. */
  folds: z.array(z.strictObject({ fold: z.string().min(1).max(200), ...moments })).max(LIMITS.foldsMost),
  allowance,
  /** Plain sentences for the report: what looked odd in this table. */
  notes: z.array(z.string()),
});

export type SurveyWork = z.infer<typeof surveyWork>;
export type SurveyAnswer = z.infer<typeof surveyAnswer>;
export type Allowance = z.infer<typeof allowance>;
