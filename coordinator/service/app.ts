import type { Socket } from 'node:net';
import swagger from '@fastify/swagger';
import Fastify, {
  type FastifyBaseLogger,
  type FastifyError,
  type FastifyInstance,
  LogController,
} from 'fastify';
import type { Logger } from 'pino';
import { LIMITS } from '../../protocol/limits.js';
import { problemOfConnection, problemOfError, problemReply, sendProblem } from './problem.js';
import type { ServiceSettings } from './settings.js';
import type { Tls } from './tls.js';

/** A specification of the largest size, escaped as JSON, with its file name. Bytes. */
const BODY_BYTES_MOST = 6 * LIMITS.textMost + 16_384;

type Deadlines = Pick<ServiceSettings, 'headDeadlineMs' | 'requestDeadlineMs' | 'readDeadlineMs'>;

/** The HTTP side without its routes: what is wrong with a request is a problem (RFC 9457) with its code. */
export async function openApp(
  logger: Logger,
  tls: Tls | null,
  deadlines: Deadlines,
): Promise<FastifyInstance> {
  const app: FastifyInstance = Fastify({
    loggerInstance: logger as FastifyBaseLogger,
    logController: new LogController({ disableRequestLogging: true }),
    bodyLimit: BODY_BYTES_MOST,
    forceCloseConnections: 'idle',
    requestTimeout: deadlines.requestDeadlineMs,
    connectionTimeout: deadlines.readDeadlineMs,
    clientErrorHandler: answerConnection,
    // an address that no route can take: sent as every other problem is
    frameworkErrors: (error, _, reply) => void sendProblem(reply, problemOfError(error)),
    ...serverOptions(tls, deadlines),
  });
  app.setSerializerCompiler(() => (data) => JSON.stringify(data));
  app.setErrorHandler<FastifyError>((error, _, reply) => {
    const problem = problemOfError(error);
    if (problem.status >= 500) logger.error({ err: error }, 'A request failed.');
    return sendProblem(reply, problem);
  });
  app.setNotFoundHandler((request, reply) => {
    const detail = `There is nothing at ${request.method} ${request.url.split('?')[0]}.`;
    return sendProblem(reply, { status: 404, title: 'Not found', detail, code: 'not-found' });
  });
  await app.register(swagger, {
    openapi: {
      openapi: '3.1.0',
      info: { title: 'commonfit coordinator', version: '1' },
      components: { securitySchemes: { bearer: { type: 'http', scheme: 'bearer' } } },
    },
  });
  return app;
}

/**
 * A certificate of a client is asked for in the handshake and judged by the doorkeeper: a refusal then has its code and
 * its reason, where a handshake broken off has an alert.
 */
function serverOptions(tls: Tls | null, { headDeadlineMs }: Deadlines) {
  const http = {
    headersTimeout: headDeadlineMs,
    connectionsCheckingInterval: Math.ceil(headDeadlineMs / 4),
  };
  if (tls === null) return { http };
  const { cert, key, clientCa } = tls;
  const client = clientCa === null ? {} : { ca: clientCa, requestCert: true, rejectUnauthorized: false };
  return { https: { ...http, cert, key, handshakeTimeout: headDeadlineMs, ...client } };
}

/** Bytes that are no request, or come too slowly. Nothing can be said where TLS itself has failed. */
function answerConnection(error: Error & { code?: string }, socket: Socket): void {
  const { code } = error;
  if (code === 'ECONNRESET' || !socket.writable || /^ERR_(SSL|TLS)_/.test(code ?? '')) {
    socket.destroy();
    return;
  }
  socket.write(problemReply(problemOfConnection(code)));
  socket.destroySoon();
}
