import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import type { FastifyInstance, FastifyReply, FastifyRequest } from 'fastify';
import { z } from 'zod';
import { type Failure, fail } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import { streamLog } from './log-stream.js';
import { type Problem, problemOf, problemSchema, sendProblem } from './problem.js';
import type { RunBook } from './run-book.js';
import { RUN_FILES, type RunEntry, summaryOf } from './run-entry.js';
import type { SiteHub } from './site-hub.js';
import { bearerOf, type Tokens } from './tokens.js';

export interface RouteParts {
  readonly book: RunBook;
  readonly hub: SiteHub;
  readonly tokens: Tokens;
  readonly streamsMost: number;
}

const runSummary = z.object({
  run: z.string(),
  title: z.string(),
  digest: z.string(),
  state: z.enum(['waiting', 'running', 'ended']),
  outcome: z.string().nullable(),
  reason: z.string().nullable(),
  round: z.int(),
  submittedAt: z.iso.datetime(),
  folder: z.string(),
});
const submission = z.strictObject({
  specification: z.string().max(LIMITS.textMost),
  /** Named in error messages. */
  file: z.string().min(1).max(1000),
});
const runParams = z.object({ run: z.string().max(64) });
const siteList = z.object({
  sites: z.array(
    z.object({
      site: z.string(),
      shard: z.object({ index: z.int(), of: z.int() }),
      connected: z.boolean(),
      software: z.string(),
      kernel: z.string(),
    }),
  ),
});

/** A zod schema as fastify's validator and the OpenAPI document take it. */
const json = (schema: z.ZodType): unknown => z.toJSONSchema(schema, { target: 'draft-7' });

const describe = (summary: string, answers: Record<number, z.ZodType>) => ({
  summary,
  security: [{ bearer: [] }],
  response: Object.fromEntries(
    Object.entries({ ...answers, '4xx': problemSchema }).map(([status, schema]) => [status, json(schema)]),
  ),
});

/** The routes for analysts, each behind an analyst's token, and the health routes, which are open. */
export function addRoutes(app: FastifyInstance, parts: RouteParts): void {
  app.get('/health/live', { schema: { summary: 'The process answers' } }, async () => ({ live: true }));
  app.get('/health/ready', { schema: { summary: 'Runs can go on' } }, async (_, reply) => {
    const halted = parts.book.halted();
    if (halted === null) return { ready: true };
    return sendProblem(reply, problemOf(fail('state-unwritable', halted).failure));
  });
  app.register(async (guarded) => {
    guarded.addHook('onRequest', async (request, reply) => {
      const problem = refuseStranger(request, parts.tokens);
      if (problem !== null) return sendProblem(reply, problem);
    });
    guarded.get('/v1/openapi.json', { schema: { hide: true } }, async () => app.swagger());
    guarded.get('/v1/sites', { schema: describe('Sites seen so far', { 200: siteList }) }, async () => ({
      sites: parts.hub.sites(),
    }));
    addRunRoutes(guarded, parts);
    addLogRoute(guarded, parts);
  });
}

/** Methods that change nothing: all that an analyst who may only watch has need of. */
const WATCHING_METHODS = ['GET', 'HEAD'];

function refuseStranger(request: FastifyRequest, tokens: Tokens): Problem | null {
  const token = bearerOf(request.headers.authorization);
  const holder = token === null ? null : tokens.holderOf(token);
  if (holder !== null && !holder.ok) return problemOf(holder.failure);
  if (holder?.value?.kind === 'analyst') {
    const { name, may } = holder.value;
    if (may === 'submit' || WATCHING_METHODS.includes(request.method)) return null;
    return {
      status: 403,
      title: 'Not allowed',
      detail: `Analyst ${name} may watch, not submit or cancel.`,
      code: 'unauthorised',
    };
  }
  const { failure } = fail('unauthorised', "This needs an analyst's token in the Authorization header.", {
    remedy: 'The coordinator writes one to analyst.token in its state folder at its first start.',
  });
  return problemOf(failure);
}

function addRunRoutes(app: FastifyInstance, { book }: RouteParts): void {
  const submitted = z.object({ run: z.string(), digest: z.string() });
  app.post<{ Body: z.infer<typeof submission> }>(
    '/v1/runs',
    { schema: { ...describe('Submit a fit specification', { 201: submitted }), body: json(submission) } },
    async (request, reply) => {
      const { specification, file } = request.body;
      const accepted = await book.submit(specification, file);
      if (!accepted.ok) return sendProblem(reply, problemOfSubmission(accepted.failures));
      return reply.code(201).send({ run: accepted.run, digest: accepted.digest });
    },
  );
  const runList = z.object({ runs: z.array(runSummary) });
  app.get('/v1/runs', { schema: describe('All runs, oldest first', { 200: runList }) }, async () => ({
    runs: book.list(),
  }));
  const oneRun = (summary: string, status: number) => ({
    schema: { ...describe(summary, { [status]: runSummary }), params: json(runParams) },
  });
  app.get<RunRoute>('/v1/runs/:run', oneRun('One run', 200), async (request, reply) =>
    withRun(book, request.params.run, reply, async (entry) => summaryOf(entry)),
  );
  app.post<RunRoute>('/v1/runs/:run/cancel', oneRun('End a run as cancelled', 202), async (request, reply) =>
    withRun(book, request.params.run, reply, async (entry) => {
      book.cancel(entry);
      return reply.code(202).send(summaryOf(entry));
    }),
  );
  const result = {
    schema: { ...describe('The result, once the run has ended', {}), params: json(runParams) },
  };
  app.get<RunRoute>('/v1/runs/:run/result', result, async (request, reply) =>
    withRun(book, request.params.run, reply, (entry) => sendResult(entry, reply)),
  );
}

interface RunRoute {
  Params: z.infer<typeof runParams>;
}

async function withRun(
  book: RunBook,
  run: string,
  reply: FastifyReply,
  use: (entry: RunEntry) => Promise<unknown>,
): Promise<unknown> {
  const entry = book.find(run);
  if (entry !== null) return use(entry);
  return sendProblem(reply, problemOf(fail('not-found', `There is no run ${run}.`).failure));
}

async function sendResult(entry: RunEntry, reply: FastifyReply): Promise<unknown> {
  const { state } = summaryOf(entry);
  if (state === 'ended') {
    return reply.type('application/json').send(await readFile(join(entry.folder, RUN_FILES.result)));
  }
  return sendProblem(reply, {
    status: 409,
    title: 'Not ended yet',
    detail: `Run ${entry.run} is ${state}; it has no result yet.`,
    code: 'not-found',
  });
}

/** Everything wrong with the document in one answer; only a document is the sender's to mend. */
function problemOfSubmission(failures: readonly Failure[]): Problem {
  const [first] = failures;
  if (failures.length === 1 && (first.code === 'coordinator-full' || first.code === 'state-unwritable')) {
    return problemOf(first);
  }
  const detail = failures.length === 1 ? first.message : `${failures.length} things are wrong with it.`;
  return { status: 422, title: 'The fit specification is refused', detail, code: first.code, failures };
}

function addLogRoute(app: FastifyInstance, { book, streamsMost }: RouteParts): void {
  const streams = new Set<FastifyReply>();
  app.addHook('preClose', async () => {
    for (const { raw } of streams) raw.destroy();
  });
  const schema = { ...describe('The round log as an event stream', {}), params: json(runParams) };
  app.get<RunRoute>('/v1/runs/:run/log', { schema }, async (request, reply) =>
    withRun(book, request.params.run, reply, async (entry) => {
      if (streams.size >= streamsMost) {
        const { failure } = fail('coordinator-full', `${streamsMost} logs are being followed already.`);
        return sendProblem(reply, problemOf(failure));
      }
      const lastId = Number.parseInt(String(request.headers['last-event-id'] ?? '0'), 10) || 0;
      reply.hijack();
      streams.add(reply);
      try {
        await streamLog(reply.raw, join(entry.folder, RUN_FILES.log), entry.open?.log ?? null, lastId);
      } catch (error) {
        request.log.error({ err: error }, 'A round log could not be streamed.');
        reply.raw.destroy();
      } finally {
        streams.delete(reply);
      }
      return reply;
    }),
  );
}
