import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import type { FastifyInstance, FastifyReply, FastifyRequest } from 'fastify';
import { livePage } from '../report/page/live-page.js';
import { LIVE_SCRIPT } from '../report/page/live-script.js';
import { noticePage, runsPage, signInPage } from '../report/page/runs-page.js';
import { contentPolicy } from '../report/page/shell.js';
import type { Doorkeeper } from './doorkeeper.js';
import { type Problem, sendProblem } from './problem.js';
import { json, type RunRoute, runParams } from './route-parts.js';
import type { RunBook } from './run-book.js';
import { RUN_FILES, summaryOf } from './run-entry.js';
import { Sessions } from './sessions.js';

export interface PageParts {
  readonly book: RunBook;
  readonly doorkeeper: Doorkeeper;
  /** A clock that does not go back. Milliseconds. */
  readonly nowMs: () => number;
  /** The service speaks TLS. */
  readonly isSecure: boolean;
}

/** A form with a token and a path. Bytes. */
const FORM_BYTES_MOST = 4096;
/** What a session opens: the pages, and the round log that the live page follows. */
const SESSION_PATHS = /^\/(?:$|runs\/|v1\/runs\/[^/]+\/log$)/;
/** Where one may be sent on to after signing in: pages of ours. */
const PAGE_PATH = /^\/(?:runs\/[A-Za-z0-9-]{1,64}(?:\/report)?)?$/;

const pathOf = (url: string): string => url.split('?')[0] ?? '';

/**
 * Pages for a browser: sign-in, the runs, a run as it goes on, its report. An analyst's token opens them, in the
 * header or, by way of the form, as a session; to be added before the other routes, whose round log a session opens too.
 */
export function addPages(app: FastifyInstance, parts: PageParts): void {
  const sessions = new Sessions(parts.nowMs);
  app.addHook('onRequest', async ({ raw, url }) => {
    const isLooking = raw.method === 'GET' || raw.method === 'HEAD';
    if (!isLooking || raw.headers.authorization !== undefined || !SESSION_PATHS.test(pathOf(url))) return;
    const token = sessions.tokenOf(raw.headers.cookie);
    if (token !== null) raw.headers.authorization = `Bearer ${token}`;
  });
  app.register(async (open) => addSignIn(open, parts, sessions));
  app.register(async (guarded) => {
    guarded.addHook('onRequest', async (request, reply) => {
      const analyst = parts.doorkeeper.analyst(request.raw);
      if (!analyst.ok) return turnedAway(request, reply, analyst.problem);
    });
    addRunPages(guarded, parts);
  });
}

/** A program is told the problem; a browser is shown where to sign in, or the problem as a page. */
function turnedAway(request: FastifyRequest, reply: FastifyReply, problem: Problem): FastifyReply {
  const isBrowser = (request.headers.accept ?? '').includes('text/html');
  if (!isBrowser) return sendProblem(reply, problem);
  if (problem.status === 401) {
    const to = pathOf(request.url);
    return reply.redirect(PAGE_PATH.test(to) ? `/sign-in?to=${encodeURIComponent(to)}` : '/sign-in', 303);
  }
  return sendPage(reply.code(problem.status), noticePage(problem.title, problem.detail), null);
}

function addSignIn(app: FastifyInstance, { doorkeeper, isSecure }: PageParts, sessions: Sessions): void {
  app.addContentTypeParser(
    'application/x-www-form-urlencoded',
    { parseAs: 'string', bodyLimit: FORM_BYTES_MOST },
    async (_: FastifyRequest, body: string) => new URLSearchParams(body),
  );
  const hidden = { schema: { hide: true } };
  const pageOf = (to: string | null | undefined): string => (to && PAGE_PATH.test(to) ? to : '/');
  app.get<{ Querystring: { to?: string | string[] } }>('/sign-in', hidden, async ({ query }, reply) =>
    sendPage(reply, signInPage(pageOf(typeof query.to === 'string' ? query.to : null), null), null),
  );
  app.post<{ Body: unknown }>('/sign-in', hidden, async (request, reply) => {
    const form = request.body instanceof URLSearchParams ? request.body : new URLSearchParams();
    const to = pageOf(form.get('to'));
    if (request.headers['sec-fetch-site'] === 'cross-site') {
      return sendPage(
        reply.code(403),
        signInPage(to, 'The form came from another site; use this one.'),
        null,
      );
    }
    const token = (form.get('token') ?? '').trim();
    const { socket, headers } = request.raw;
    // Signing in is looking: an analyst who may only watch may do it too.
    const asking = { socket, method: 'GET', headers: { ...headers, authorization: `Bearer ${token}` } };
    const analyst = doorkeeper.analyst(asking);
    if (analyst.ok) {
      return reply.header('set-cookie', sessions.begin(token, isSecure)).redirect(to, 303);
    }
    const { status, detail } = analyst.problem;
    const said =
      status === 401 ? 'That is no analyst’s token of this coordinator, or it has expired.' : detail;
    return sendPage(reply.code(status), signInPage(to, said), null);
  });
  app.post('/sign-out', hidden, async (request, reply) =>
    reply.header('set-cookie', sessions.end(request.headers.cookie, isSecure)).redirect('/sign-in', 303),
  );
}

function addRunPages(app: FastifyInstance, { book }: PageParts): void {
  const hidden = { schema: { hide: true } };
  app.get('/', hidden, async (_, reply) => {
    const runs = book.list().map((one) => ({ ...one, hasReport: one.state === 'ended' }));
    return sendPage(reply, runsPage(runs), null);
  });
  const ofRun = { schema: { hide: true, params: json(runParams) } };
  app.get<RunRoute>('/runs/:run', ofRun, async ({ params }, reply) => {
    const entry = book.find(params.run);
    if (entry === null) return noRun(reply, params.run);
    return sendPage(reply, livePage(entry), LIVE_SCRIPT);
  });
  app.get<RunRoute>('/runs/:run/report', ofRun, async (request, reply) => {
    const { run } = request.params;
    const entry = book.find(run);
    if (entry === null) return noRun(reply, run);
    const { state } = summaryOf(entry);
    if (state !== 'ended') {
      return notThere(request, reply, 409, 'Not ended yet', `Run ${run} is ${state}; it has no report yet.`);
    }
    const report = await reportIn(entry.folder);
    if (report !== null) return sendReport(reply, report);
    const detail = `Run ${run} has no report.html in its folder; \`commonfit result ${run}\` shows its result.`;
    return notThere(request, reply, 404, 'No report', detail);
  });
}

async function reportIn(folder: string): Promise<Buffer | null> {
  try {
    return await readFile(join(folder, RUN_FILES.report));
  } catch (error) {
    if ((error as NodeJS.ErrnoException).code === 'ENOENT') return null;
    throw error;
  }
}

const noRun = (reply: FastifyReply, run: string): FastifyReply =>
  notThere(reply.request, reply, 404, 'Not found', `There is no run ${run}.`);

function notThere(
  request: FastifyRequest,
  reply: FastifyReply,
  status: number,
  title: string,
  detail: string,
): FastifyReply {
  const isBrowser = (request.headers.accept ?? '').includes('text/html');
  if (!isBrowser) return sendProblem(reply, { status, title, detail, code: 'not-found' });
  return sendPage(reply.code(status), noticePage(title, detail), null);
}

const HEADERS = {
  'cache-control': 'no-store',
  'referrer-policy': 'no-referrer',
  'x-content-type-options': 'nosniff',
  'x-frame-options': 'DENY',
  'cross-origin-opener-policy': 'same-origin',
  'cross-origin-resource-policy': 'same-origin',
} as const;

const withPolicy = (reply: FastifyReply, policy: string): FastifyReply =>
  reply
    .headers({ ...HEADERS, 'content-security-policy': `${policy}; frame-ancestors 'none'` })
    .type('text/html; charset=utf-8');

const sendPage = (reply: FastifyReply, page: string, script: string | null): FastifyReply =>
  withPolicy(reply, contentPolicy(script)).send(page);

/** The file names the digest of its own style, which may be that of an earlier version; both policies hold together. */
const sendReport = (reply: FastifyReply, report: Buffer): FastifyReply =>
  withPolicy(
    reply,
    "default-src 'none'; style-src 'unsafe-inline'; img-src data:; base-uri 'none'; form-action 'none'",
  ).send(report);
