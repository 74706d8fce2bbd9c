import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import swagger from '@fastify/swagger';
import Fastify, {
  type FastifyBaseLogger,
  type FastifyError,
  type FastifyInstance,
  LogController,
} from 'fastify';
import { type Logger, pino } from 'pino';
import { z } from 'zod';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import { fit } from '../run/fit.js';
import { makeFolder, writeWhole } from './files.js';
import type { HostTime, Notice } from './host-parts.js';
import { problemOfError, sendProblem } from './problem.js';
import { addRoutes } from './routes.js';
import { type BookParts, RunBook } from './run-book.js';
import { type ServiceOptions, type ServiceSettings, serviceSettings } from './settings.js';
import { SiteHub } from './site-hub.js';
import { lockState } from './state-lock.js';
import { openTokenUses } from './token-uses.js';
import { openTokens, type Tokens } from './tokens.js';
import { upgradeHandler } from './upgrade.js';

export interface Service {
  /** `http://127.0.0.1:7443`, no slash at the end; workers link at the same place with ws or wss. */
  readonly address: string;
  close(): Promise<void>;
}

/** A specification of the largest size, escaped as JSON, with its file name. Bytes. */
const BODY_BYTES_MOST = 6 * LIMITS.textMost + 16_384;
/** How long workers have for the closing handshake. Milliseconds. */
const CLOSE_GRACE_MS = 1000;
/** How often open links are closed whose tokens were revoked or have expired. Milliseconds. */
const TOKENS_RECHECKED_MS = 2000;

const steadyTime: HostTime = {
  wallMs: () => Date.now(),
  steadyMs: () => performance.now(),
  after: (delayMs, call) => {
    // Node takes no longer delay; whoever waits longer is woken early and waits on.
    const timer = setTimeout(call, Math.min(delayMs, 2 ** 31 - 1));
    return () => clearTimeout(timer);
  },
};

/**
 * Starts the coordinator: takes up the unfinished runs of its state folder, then listens. Codes: `field-value`,
 * `field-conflict` (settings), `file-unreadable` (certificate, tokens), `state-unwritable`, `port-in-use`.
 */
export async function startService(
  options: ServiceOptions,
  parts: { readonly fit: BookParts['fit'] } = { fit },
): Promise<Checked<Service>> {
  const settings = checkSettings(options);
  if (!settings.ok) return settings;
  const tls = await readTls(settings.value);
  if (!tls.ok) return tls;
  const { state, logLevel } = settings.value;
  const folder = await makeFolder(state);
  if (!folder.ok) return folder;
  const unlock = await lockState(state, process.pid);
  if (!unlock.ok) return unlock;
  const logger = pino({ level: logLevel }, pino.destination({ dest: 2, sync: true }));
  const started = await run(settings.value, tls.value, logger, parts.fit, unlock.value);
  if (!started.ok) await unlock.value();
  return started;
}

async function run(
  settings: ServiceSettings,
  tls: Tls | null,
  logger: Logger,
  fitRun: BookParts['fit'],
  unlock: () => Promise<void>,
): Promise<Checked<Service>> {
  const notice = noticeTo(logger);
  const uses = openTokenUses(settings.state, steadyTime.wallMs, notice);
  const tokens = openTokens(settings.state, { onUse: uses.note });
  const analyst = await issueFirstAnalyst(tokens, settings.state);
  if (!analyst.ok) return analyst;
  const hub: SiteHub = new SiteHub(steadyTime, {
    connected: (linked) => book.connected(linked),
    lost: (linked) => book.lost(linked),
    message: (linked, message) => book.message(linked, message),
    notice,
  });
  const { state, runningMost, waitingMost, linksMost, streamsMost } = settings;
  const book: RunBook = new RunBook({
    state,
    runningMost,
    waitingMost,
    time: steadyTime,
    node: process.version,
    fit: fitRun,
    connected: () => hub.connected(),
    notice,
  });
  const recovered = await book.recover();
  if (!recovered.ok) return recovered;
  const app = await openApp(logger, tls);
  const upgrade = upgradeHandler(hub, tokens, linksMost);
  app.server.on('upgrade', upgrade.handle);
  addRoutes(app, { book, hub, tokens, streamsMost });
  const recheck = setInterval(upgrade.recheck, TOKENS_RECHECKED_MS);
  const close = async (): Promise<void> => {
    clearInterval(recheck);
    await book.close();
    hub.close();
    const grace = setTimeout(upgrade.breakAll, CLOSE_GRACE_MS);
    await app.close();
    clearTimeout(grace);
    await uses.settled();
    await unlock();
  };
  const listening = await listen(app, settings);
  if (!listening.ok) {
    await close();
    return listening;
  }
  return succeed({ address: listening.value, close });
}

function checkSettings(options: ServiceOptions): Checked<ServiceSettings> {
  const parsed = serviceSettings.safeParse(options);
  if (!parsed.success)
    return fail('field-value', `A setting is not valid: ${z.prettifyError(parsed.error)}.`);
  const { host, certFile, keyFile, plainText } = parsed.data;
  if ((certFile === undefined) !== (keyFile === undefined)) {
    return fail('field-conflict', 'A certificate needs its key, and a key its certificate.', {
      remedy: 'Give both files or neither.',
    });
  }
  const loopback = host === 'localhost' || host === '::1' || /^127\.\d+\.\d+\.\d+$/.test(host);
  if (!loopback && certFile === undefined && !plainText) {
    return fail('field-conflict', `Address ${host} is not loopback, and there is no certificate.`, {
      remedy:
        'Give a certificate and its key; or ask for plain text by name, if something in front does TLS.',
    });
  }
  return succeed(parsed.data);
}

interface Tls {
  readonly cert: string;
  readonly key: string;
}

async function readTls({ certFile, keyFile }: ServiceSettings): Promise<Checked<Tls | null>> {
  if (certFile === undefined || keyFile === undefined) return succeed(null);
  try {
    return succeed({ cert: await readFile(certFile, 'utf8'), key: await readFile(keyFile, 'utf8') });
  } catch (error) {
    return fail('file-unreadable', `The certificate or its key cannot be read: ${String(error)}.`);
  }
}

/** At the first start there is nobody who could submit a run: the first analyst's token is left in a file. */
async function issueFirstAnalyst(tokens: Tokens, state: string): Promise<Checked<null>> {
  const holders = tokens.holders();
  if (!holders.ok) return holders;
  if (holders.value.some(({ kind }) => kind === 'analyst')) return succeed(null);
  const token = await tokens.issue({ kind: 'analyst', name: 'analyst' });
  return token.ok ? writeWhole(join(state, 'analyst.token'), `${token.value}\n`, 0o600) : token;
}

async function openApp(logger: Logger, tls: Tls | null): Promise<FastifyInstance> {
  const app: FastifyInstance = Fastify({
    loggerInstance: logger as FastifyBaseLogger,
    logController: new LogController({ disableRequestLogging: true }),
    bodyLimit: BODY_BYTES_MOST,
    forceCloseConnections: 'idle',
    ...(tls === null ? {} : { https: tls }),
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

async function listen(app: FastifyInstance, { host, port }: ServiceSettings): Promise<Checked<string>> {
  try {
    return succeed(await app.listen({ host, port }));
  } catch (error) {
    const { code, message } = error as NodeJS.ErrnoException;
    if (code === 'EADDRINUSE') {
      return fail('port-in-use', `Port ${port} of ${host} is in use.`, {
        remedy: 'Give another with --listen.',
      });
    }
    return fail('field-value', `The coordinator cannot listen at ${host}, port ${port}: ${message}.`);
  }
}

/** The operational log: one JSON object a line on standard error. Tokens and numbers of sites never come here. */
function noticeTo(logger: Logger): (notice: Notice) => void {
  return ({ level, message, ...rest }) => logger[level](rest, message);
}
