import type { IncomingMessage } from 'node:http';
import { join } from 'node:path';
import type { FastifyInstance, FastifyReply } from 'fastify';
import { fail } from '../../protocol/failure.js';
import { streamLog } from './log-stream.js';
import { problemOf, sendProblem } from './problem.js';
import { describe, json, type RunRoute, runParams, withRun } from './route-parts.js';
import type { RouteParts } from './routes.js';
import { RUN_FILES } from './run-entry.js';

/** The round log as an event stream, for so many at once and so many of one analyst. `senders`: who sent a request. */
export function addLogRoute(
  app: FastifyInstance,
  { book, settings, notice }: RouteParts,
  senders: WeakMap<IncomingMessage, string>,
): void {
  const streams = new Map<FastifyReply, string>();
  app.addHook('preClose', async () => {
    for (const { raw } of streams.keys()) raw.destroy();
  });
  const schema = { ...describe('The round log as an event stream', {}), params: json(runParams) };
  app.get<RunRoute>('/v1/runs/:run/log', { schema }, async (request, reply) =>
    withRun(book, request.params.run, reply, async (entry) => {
      const analyst = senders.get(request.raw) ?? '';
      const found = fullFor([...streams.values()], analyst, settings);
      if (found !== null) return sendProblem(reply, problemOf(fail('coordinator-full', found).failure));
      const lastId = Number.parseInt(String(request.headers['last-event-id'] ?? '0'), 10) || 0;
      reply.hijack();
      streams.set(reply, analyst);
      try {
        const path = join(entry.folder, RUN_FILES.log);
        const how = await streamLog(
          reply.raw,
          path,
          entry.open?.log ?? null,
          lastId,
          settings.readDeadlineMs,
        );
        if (how === 'too-slow') {
          const message = `Analyst ${analyst} does not read the round log that was asked for; the stream was ended.`;
          notice({ level: 'warn', code: 'too-slow', message, run: entry.run });
        }
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

function fullFor(
  streams: readonly string[],
  analyst: string,
  { streamsMost, streamsPerAnalystMost }: RouteParts['settings'],
): string | null {
  if (streams.length >= streamsMost) return `${streamsMost} logs are being followed already.`;
  const own = streams.filter((name) => name === analyst).length;
  return own < streamsPerAnalystMost ? null : `Analyst ${analyst} follows ${own} logs already.`;
}
