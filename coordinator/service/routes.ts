import { readFile } from 'node:fs/promises';
import type { IncomingMessage } from 'node:http';
import { join } from 'node:path';
import type { FastifyInstance, FastifyReply } from 'fastify';
import { z } from 'zod';
import { type Failure, type FailureCode, fail } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import type { Doorkeeper } from './doorkeeper.js';
import type { Notice } from './host-parts.js';
import { addLogRoute } from './log-route.js';
import type { Metrics } from './metrics.js';
import { type Problem, problemOf, sendProblem } from './problem.js';
import { describe, json, type RunRoute, runParams, withRun } from './route-parts.js';
import type { RunBook } from './run-book.js';
import { RUN_FILES, type RunEntry, summaryOf } from './run-entry.js';
import type { ServiceSettings } from './settings.js';
import type { SiteHub } from './site-hub.js';

export interface RouteParts {
  readonly book: RunBook;
  readonly hub: SiteHub;
  readonly doorkeeper: Doorkeeper;
  readonly settings: Pick<ServiceSettings, 'streamsMost' | 'streamsPerAnalystMost' | 'readDeadlineMs'>;
  readonly metrics: Pick<Metrics, 'text' | 'contentType'>;
  readonly notice: (notice: Notice) => void;
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
  /** A run that has ended, whose coefficients the new one starts from. */
  startFrom: z.string().min(1).max(64).optional(),
});
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

/** The routes for analysts, each behind an analyst's token, and the health routes, which are open. */
export function addRoutes(app: FastifyInstance, parts: RouteParts): void {
  app.get('/health/live', { schema: { summary: 'The process answers' } }, async () => ({ live: true }));
  app.get('/health/ready', { schema: { summary: 'Runs can go on' } }, async (_, reply) => {
    const halted = parts.book.halted();
    if (halted === null) return { ready: true };
    return sendProblem(reply, problemOf(fail('state-unwritable', halted).failure));
  });
  const senders = new WeakMap<IncomingMessage, string>();
  app.register(async (guarded) => {
    guarded.addHook('onRequest', async (request, reply) => {
      const analyst = parts.doorkeeper.analyst(request.raw);
      if (!analyst.ok) return sendProblem(reply, analyst.problem);
      senders.set(request.raw, analyst.value);
    });
    guarded.get('/v1/openapi.json', { schema: { hide: true } }, async () => app.swagger());
    guarded.get('/v1/sites', { schema: describe('Sites seen so far', { 200: siteList }) }, async () => ({
      sites: parts.hub.sites(),
    }));
    guarded.get(
      '/metrics',
      { schema: describe('Counts for a monitoring system, in the Prometheus text format', {}) },
      async (_, reply) => reply.type(parts.metrics.contentType).send(await parts.metrics.text()),
    );
    addRunRoutes(guarded, parts);
    addLogRoute(guarded, parts, senders);
  });
}

function addRunRoutes(app: FastifyInstance, { book }: RouteParts): void {
  const submitted = z.object({ run: z.string(), digest: z.string() });
  app.post<{ Body: z.infer<typeof submission> }>(
    '/v1/runs',
    { schema: { ...describe('Submit a fit specification', { 201: submitted }), body: json(submission) } },
    async (request, reply) => {
      const { specification, file, startFrom } = request.body;
      const accepted = await book.submit(specification, file, startFrom ?? null);
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
      const cancelled = await book.cancel(entry);
      if (!cancelled.ok) return sendProblem(reply, problemOf(cancelled.failure));
      return reply.code(202).send(summaryOf(entry));
    }),
  );
  const specification = {
    schema: {
      ...describe('The fit specification as submitted', { 200: z.object({ specification: z.string() }) }),
      params: json(runParams),
    },
  };
  app.get<RunRoute>('/v1/runs/:run/specification', specification, async (request, reply) =>
    withRun(book, request.params.run, reply, sendSpecification),
  );
  const result = {
    schema: { ...describe('The result, once the run has ended', {}), params: json(runParams) },
  };
  app.get<RunRoute>('/v1/runs/:run/result', result, async (request, reply) =>
    withRun(book, request.params.run, reply, (entry) => sendResult(entry, reply)),
  );
}

async function sendSpecification(entry: RunEntry): Promise<{ specification: string }> {
  return { specification: await readFile(join(entry.folder, RUN_FILES.specification), 'utf8') };
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

/** What is the matter with more than the document: the coordinator has no room, or there is no such run to start from. */
const NOT_OF_THE_DOCUMENT: readonly FailureCode[] = ['coordinator-full', 'state-unwritable', 'not-found'];

/** Everything wrong with the document in one answer; only a document is the sender's to mend. */
function problemOfSubmission(failures: readonly Failure[]): Problem {
  const [first] = failures;
  if (failures.length === 1 && NOT_OF_THE_DOCUMENT.includes(first.code)) {
    return problemOf(first);
  }
  const detail = failures.length === 1 ? first.message : `${failures.length} things are wrong with it.`;
  const what = first.where?.field === 'startFrom' ? 'start' : 'fit specification';
  return { status: 422, title: `The ${what} is refused`, detail, code: first.code, failures };
}
