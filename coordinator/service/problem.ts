import { STATUS_CODES } from 'node:http';
import type { FastifyError, FastifyReply } from 'fastify';
import { z } from 'zod';
import type { Failure, FailureCode } from '../../protocol/failure.js';

/** RFC 9457 problem details, with the stable code and, for a document, everything that is wrong with it. */
export interface Problem {
  readonly status: number;
  readonly title: string;
  readonly detail: string;
  readonly code: FailureCode;
  readonly failures?: readonly Failure[];
  /** The header `Retry-After` (RFC 9110, section 10.2.3). Seconds. */
  readonly retryAfterS?: number;
}

export const problemSchema = z.object({
  type: z.string(),
  status: z.int(),
  title: z.string(),
  detail: z.string(),
  code: z.string(),
  failures: z.array(z.object({ code: z.string(), message: z.string() })).optional(),
});

const STATUS_OF: Partial<Record<FailureCode, readonly [number, string]>> = {
  unauthorised: [401, 'Not authorised'],
  'token-refused': [401, 'Not authorised'],
  'certificate-refused': [403, 'Certificate refused'],
  'not-found': [404, 'Not found'],
  'too-slow': [408, 'Too slow'],
  'frame-too-large': [413, 'Too large'],
  'field-value': [400, 'Request not understood'],
  'too-many-requests': [429, 'Too many requests'],
  'coordinator-full': [503, 'No room at present'],
  'state-unwritable': [503, 'The state folder cannot be used'],
};

/** When a coordinator that has no room may have some. Seconds. */
const ROOM_AFTER_S = 10;

export function problemOf(failure: Failure): Problem {
  const [status, title] = STATUS_OF[failure.code] ?? [500, 'The coordinator failed'];
  const detail = failure.remedy === undefined ? failure.message : `${failure.message} ${failure.remedy}`;
  const problem = { status, title, detail, code: failure.code };
  return failure.code === 'coordinator-full' ? { ...problem, retryAfterS: ROOM_AFTER_S } : problem;
}

const PROBLEM_TYPE = 'application/problem+json';

/** `about:blank`: the status says what kind of problem it is, `code` which. */
const problemText = ({ retryAfterS: _, ...problem }: Problem): string =>
  JSON.stringify({ type: 'about:blank', ...problem });

const headersOf = ({ status, retryAfterS }: Problem): Record<string, string> => ({
  'Content-Type': PROBLEM_TYPE,
  ...(status === 401 ? { 'WWW-Authenticate': 'Bearer' } : {}),
  ...(retryAfterS === undefined ? {} : { 'Retry-After': String(retryAfterS) }),
});

export function sendProblem(reply: FastifyReply, problem: Problem): FastifyReply {
  return reply.code(problem.status).headers(headersOf(problem)).send(problemText(problem));
}

/** The same as a whole HTTP response, for a connection that no request handler has; the connection ends with it. */
export function problemReply(problem: Problem): string {
  const body = problemText(problem);
  const headers = { Connection: 'close', 'Content-Length': Buffer.byteLength(body), ...headersOf(problem) };
  const lines = Object.entries(headers).map(([name, value]) => `${name}: ${value}`);
  return `HTTP/1.1 ${problem.status} ${STATUS_CODES[problem.status] ?? ''}\r\n${lines.join('\r\n')}\r\n\r\n${body}`;
}

/** What fastify itself found wrong with a request, or a defect of ours. */
export function problemOfError(error: FastifyError): Problem {
  const status = error.statusCode ?? 500;
  if (status === 413) {
    return {
      status,
      title: 'Too large',
      detail: 'The request is larger than is taken.',
      code: 'frame-too-large',
    };
  }
  if (status < 500) {
    return { status, title: 'Request not understood', detail: `${error.message}.`, code: 'field-value' };
  }
  const detail = 'A defect of commonfit; the operational log of the coordinator says more.';
  return { status: 500, title: 'The coordinator failed', detail, code: 'internal' };
}

/** What Node found wrong with the bytes of a connection before there was a request, by its code. */
export function problemOfConnection(code: string | undefined): Problem {
  if (code === 'ERR_HTTP_REQUEST_TIMEOUT') {
    return {
      status: 408,
      title: 'Too slow',
      detail: 'The request did not come whole in time.',
      code: 'too-slow',
    };
  }
  if (code === 'HPE_HEADER_OVERFLOW') {
    return {
      status: 431,
      title: 'Too large',
      detail: 'The head of the request is larger than is taken.',
      code: 'frame-too-large',
    };
  }
  return {
    status: 400,
    title: 'Request not understood',
    detail: 'The bytes are no request of HTTP/1.1.',
    code: 'field-value',
  };
}
