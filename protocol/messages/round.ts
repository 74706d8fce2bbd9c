import { z } from 'zod';
import { FAILURE_CODES } from '../failure.js';
import { evaluateAnswer, evaluateWork } from './evaluate.js';
import { factorAnswer, factorWork } from './factor.js';
import { jointAnswer, jointWork } from './joint.js';
import { marginsAnswer, marginsWork } from './margins.js';
import { proximalAnswer, proximalWork } from './proximal.js';
import { qualityAnswer, qualityWork } from './quality.js';
import { scoresAnswer, scoresWork } from './scores.js';
import { siteFitAnswer, siteFitWork } from './site-fit.js';
import { surveyAnswer, surveyWork } from './survey.js';
import { count } from './vector.js';

export const work = z.discriminatedUnion('work', [
  surveyWork,
  proximalWork,
  evaluateWork,
  jointWork,
  factorWork,
  scoresWork,
  siteFitWork,
  marginsWork,
  qualityWork,
]);
export const workAnswer = z.discriminatedUnion('work', [
  surveyAnswer,
  proximalAnswer,
  evaluateAnswer,
  jointAnswer,
  factorAnswer,
  scoresAnswer,
  siteFitAnswer,
  marginsAnswer,
  qualityAnswer,
]);

const identity = { run: z.string().min(1).max(64), ask: count.min(1) };

/** One request: (run, ask) is its identity. A repeated ask has the same content and gets the same answer. */
export const ask = z.strictObject({ kind: z.literal('ask'), ...identity, work: z.array(work).min(1) });

/** The reply: one answer per work item, in the same order. */
export const answer = z.strictObject({
  kind: z.literal('answer'),
  ...identity,
  work: z.array(workAnswer).min(1),
});

/** The site will not or cannot answer: why, and what its custodian or the analyst can do. */
export const refusal = z.strictObject({
  kind: z.literal('refusal'),
  ...identity,
  code: z.enum(FAILURE_CODES),
  message: z.string().max(4000),
  remedy: z.string().max(4000).nullable(),
});

export type Work = z.infer<typeof work>;
export type WorkAnswer = z.infer<typeof workAnswer>;
export type Ask = z.infer<typeof ask>;
export type Answer = z.infer<typeof answer>;
export type Refusal = z.infer<typeof refusal>;
