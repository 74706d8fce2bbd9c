import { join } from 'node:path';
import type { FastifyInstance } from 'fastify';
import type { Logger } from 'pino';
import { z } from 'zod';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Pulse } from '../../protocol/link/websocket-link.js';
import { fit } from '../run/fit.js';
import { openApp } from './app.js';
import { Connections } from './connections.js';
import { Doorkeeper } from './doorkeeper.js';
import { makeFolder, writeWhole } from './files.js';
import type { HostTime } from './host-parts.js';
import { Metrics } from './metrics.js';
import { noticeTo, openLog, runLines } from './operational-log.js';
import { addPages } from './pages.js';
import { addRoutes } from './routes.js';
import { type BookParts, RunBook } from './run-book.js';
import { type ServiceOptions, type ServiceSettings, serviceSettings } from './settings.js';
import { SiteHub } from './site-hub.js';
import { lockState } from './state-lock.js';
import { outOfDateFailure, readTls, type Tls } from './tls.js';
import { openTokenUses } from './token-uses.js';
import { openTokens, type Tokens } from './tokens.js';
import { upgradeHandler } from './upgrade.js';

export interface Service {
  /** `http://127.0.0.1:7443`, no slash at the end; workers link at the same place with ws or wss. */
  readonly address: string;
  close(): Promise<void>;
}

/** What the programs leave as it is and tests replace. */
export interface ServiceParts {
  readonly fit: BookParts['fit'];
  readonly pulse?: Pulse;
}

/** How long workers have for the closing handshake, and requests for their replies. Milliseconds. */
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
  parts: ServiceParts = { fit },
): Promise<Checked<Service>> {
  const settings = checkSettings(options);
  if (!settings.ok) return settings;
  const tls = await readTls(settings.value);
  if (!tls.ok) return tls;
  const { state } = settings.value;
  const folder = await makeFolder(state);
  if (!folder.ok) return folder;
  const unlock = await lockState(state, process.pid);
  if (!unlock.ok) return unlock;
  const logger = openLog(settings.value);
  const started = await run(settings.value, tls.value, logger, parts, unlock.value);
  if (!started.ok) await unlock.value();
  return started;
}

async function run(
  settings: ServiceSettings,
  tls: Tls | null,
  logger: Logger,
  parts: ServiceParts,
  unlock: () => Promise<void>,
): Promise<Checked<Service>> {
  const notice = noticeTo(logger);
  const outOfDate = tls === null ? null : outOfDateFailure(tls.cert, steadyTime.wallMs());
  if (outOfDate !== null) notice({ level: 'warn', ...outOfDate });
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
  const { state, runningMost, waitingMost } = settings;
  const metrics: Metrics = new Metrics({
    runs: () => book.list(),
    halted: () => book.halted(),
    traffic: () => hub.traffic(),
  });
  const tell = runLines(notice);
  const book: RunBook = new RunBook({
    state,
    runningMost,
    waitingMost,
    time: steadyTime,
    node: process.version,
    fit: parts.fit,
    connected: () => hub.connected(),
    notice,
    onlooker: {
      event: (run, event) => {
        metrics.event(run, event);
        tell(run, event);
      },
      answered: metrics.answered,
    },
  });
  const recovered = await book.recover();
  if (!recovered.ok) return recovered;
  const app = await openApp(logger, tls, settings);
  const connections = new Connections(settings, steadyTime.steadyMs, notice);
  connections.guard(app.server, tls !== null);
  const doorkeeper = new Doorkeeper({ tokens, settings, time: steadyTime, notice });
  const { pulse } = parts;
  const upgrade = upgradeHandler({ hub, doorkeeper, connections, settings, pulse });
  app.server.on('upgrade', upgrade.handle);
  addPages(app, { book, doorkeeper, nowMs: steadyTime.steadyMs, isSecure: tls !== null });
  addRoutes(app, { book, hub, doorkeeper, settings, metrics, notice });
  const recheck = setInterval(upgrade.recheck, TOKENS_RECHECKED_MS);
  const close = async (): Promise<void> => {
    clearInterval(recheck);
    await book.close();
    hub.close();
    const grace = setTimeout(() => {
      upgrade.breakAll();
      connections.breakAll();
    }, CLOSE_GRACE_MS);
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
  const { host, certFile, keyFile, clientCaFile, plainText } = parsed.data;
  if ((certFile === undefined) !== (keyFile === undefined)) {
    return fail('field-conflict', 'A certificate needs its key, and a key its certificate.', {
      remedy: 'Give both files or neither.',
    });
  }
  if (clientCaFile !== undefined && certFile === undefined) {
    return fail('field-conflict', 'Certificates of clients are asked for over TLS only.', {
      remedy: "Give the coordinator's own certificate and its key too.",
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

/** At the first start there is nobody who could submit a run: the first analyst's token is left in a file. */
async function issueFirstAnalyst(tokens: Tokens, state: string): Promise<Checked<null>> {
  const holders = tokens.holders();
  if (!holders.ok) return holders;
  if (holders.value.some(({ kind }) => kind === 'analyst')) return succeed(null);
  const token = await tokens.issue({ kind: 'analyst', name: 'analyst' });
  return token.ok ? writeWhole(join(state, 'analyst.token'), `${token.value}\n`) : token;
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
    return fail('field-value', `The coordinator cannot listen at ${host}, port ${port}: ${message}.`, {
      remedy: 'Give an address of this machine, and a port that this user may take, with --listen.',
    });
  }
}
