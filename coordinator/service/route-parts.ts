import type { FastifyReply } from 'fastify';
import { z } from 'zod';
import { fail } from '../../protocol/failure.js';
import { problemOf, problemSchema, sendProblem } from './problem.js';
import type { RunBook } from './run-book.js';
import type { RunEntry } from './run-entry.js';

export const runParams = z.object({ run: z.string().max(64) });

export interface RunRoute {
  Params: z.infer<typeof runParams>;
}

/** A zod schema as fastify's validator and the OpenAPI document take it. */
export const json = (schema: z.ZodType): unknown => z.toJSONSchema(schema, { target: 'draft-7' });

export const describe = (summary: string, answers: Record<number, z.ZodType>) => ({
  summary,
  security: [{ bearer: [] }],
  response: Object.fromEntries(
    Object.entries({ ...answers, '4xx': problemSchema }).map(([status, schema]) => [status, json(schema)]),
  ),
});

/** The run of a request. Its id is looked up among the runs there are and never made a path. */
export async function withRun(
  book: RunBook,
  run: string,
  reply: FastifyReply,
  use: (entry: RunEntry) => Promise<unknown>,
): Promise<unknown> {
  const entry = book.find(run);
  if (entry !== null) return use(entry);
  return sendProblem(reply, problemOf(fail('not-found', `There is no run ${run}.`).failure));
}
