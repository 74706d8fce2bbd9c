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
  'not-found': [404, 'Not found'],
  'frame-too-large': [413, 'Too large'],
  'field-value': [400, 'Request not understood'],
  'coordinator-full': [503, 'No room at present'],
  'state-unwritable': [503, 'The state folder cannot be used'],
};

export function problemOf(failure: Failure): Problem {
  const [status, title] = STATUS_OF[failure.code] ?? [500, 'The coordinator failed'];
  const detail = failure.remedy === undefined ? failure.message : `${failure.message} ${failure.remedy}`;
  return { status, title, detail, code: failure.code };
}

export const PROBLEM_TYPE = 'application/problem+json';

/** `about:blank`: the status says what kind of problem it is, `code` which. */
export const problemText = (problem: Problem): string => JSON.stringify({ type: 'about:blank', ...problem });

export function sendProblem(reply: FastifyReply, problem: Problem): FastifyReply {
  if (problem.status === 401) reply.header('www-authenticate', 'Bearer');
  return reply.code(problem.status).type(PROBLEM_TYPE).send(problemText(problem));
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
