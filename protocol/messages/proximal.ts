import { z } from 'zod';
import { LIMITS } from '../limits.js';
import { part } from './part.js';
import { count, finite, vector } from './vector.js';

/**
 * A proximal problem: x = argmin φ(x) + ½ (x − center)ᵀ M (x − center), M = scale · diag(diagonal).
 *
 * `diagonal` and `start` seldom change from ask to ask, so they may be left out (null): then the site takes the diagonal
 * that came with ask `diagonalAsk`, and starts from the point it answered in ask `startAsk` (both of this run, same
 * problem). A site that no longer has them refuses with `memory-missing` and is asked again with both in full: the
 * answer depends on the content alone, never on what a worker happens to remember.
 */
export const proximalProblem = z.strictObject({
  problem: count,
  part,
  center: vector,
  scale: finite.positive(),
  diagonal: vector.nullable(),
  diagonalAsk: count,
  start: vector.nullable(),
  startAsk: count,
});

export const proximalWork = z.strictObject({
  work: z.literal('proximal'),
  problems: z.array(proximalProblem).min(1).max(LIMITS.batchMost),
});

export const proximalAnswer = z.strictObject({
  work: z.literal('proximal'),
  problems: z
    .array(z.strictObject({ problem: count, point: vector, newtonSteps: count }))
    .min(1)
    .max(LIMITS.batchMost),
});

export type ProximalProblem = z.infer<typeof proximalProblem>;
export type ProximalWork = z.infer<typeof proximalWork>;
export type ProximalAnswer = z.infer<typeof proximalAnswer>;
