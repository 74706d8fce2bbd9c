import { totalmem } from 'node:os';
import { setTimeout as delay } from 'node:timers/promises';
import type { KernelName, KernelVariant } from '../../numerics/kernels/kernel.js';
import { type Failure, fail, succeed } from '../../protocol/failure.js';
import { connectLink } from '../../protocol/link/websocket.js';
import { PROTOCOL_VERSION, SOFTWARE } from '../../protocol/version.js';
import { Ledger } from '../custody/ledger.js';
import type { SiteFile } from '../custody/site-file.js';
import { type Answerer, createAnswerer } from '../service/answerer.js';
import { type ShardBuilder, shardsInMemory } from '../service/built-shard.js';
import { keepConnected, type Timers } from '../service/connection.js';
import type { WorkerEvent } from '../service/events.js';
import { beat } from '../service/heartbeat.js';
import { kernelVariant } from '../service/kernel-file.js';
import { checkRowCache } from '../service/row-cache.js';
import { boundedShards } from '../service/row-store.js';
import { besideSiteFile, checkLedgerWritable, ledgerOnDisk, readApprovals } from '../service/site-folder.js';
import { readInParts, readTable } from '../source/read-table.js';
import { readSiteFile } from './documents.js';
import { EXIT, type ExitCode, exitCodeOf } from './exit-codes.js';
import { levelOf, sentenceOf } from './log-lines.js';
import { readSecrets } from './secrets.js';
import { giveUp, tell } from './terminal.js';

export interface JoinOptions {
  readonly approvals?: string;
  readonly once: boolean;
  readonly plainText: boolean;
  readonly json: boolean;
  /** Absent: the fastest one that this Node takes without an experimental flag. */
  readonly kernel?: KernelName;
  /** Threads that work on the rows. */
  readonly threads: number;
  /** Bytes that the rows of a table may take; absent: all rows are in memory. */
  readonly memory?: number;
  /** File for a sign of life, for service managers. */
  readonly heartbeat?: string;
}

/** How long an answer in the making may take when the worker is told to stop. */
const GRACE_MS = 10_000;

/** Connects to the coordinator and answers until told to stop. */
export async function join(siteFile: string, options: JoinOptions): Promise<ExitCode> {
  const site = await readSiteFile(siteFile);
  if (!site.ok) return giveUp(site.failures);
  const onEvent = await eventLog(options.json);
  const failure = await whileBeating(options.heartbeat, () => joinAs(site.value, options, onEvent));
  onEvent({ event: 'stopped', failure });
  return failure === null ? EXIT.ok : exitCodeOf(failure);
}

async function whileBeating(
  file: string | undefined,
  work: () => Promise<Failure | null>,
): Promise<Failure | null> {
  if (file === undefined) return work();
  const beating = await beat(file);
  if (!beating.ok) return beating.failure;
  try {
    return await work();
  } finally {
    await beating.value();
  }
}

/** Ends the process even where an answer that outlasted the grace time is still being computed. */
export async function joinAndLeave(siteFile: string, options: JoinOptions): Promise<never> {
  process.exit(await join(siteFile, options));
}

async function joinAs(
  site: SiteFile,
  options: JoinOptions,
  onEvent: (event: WorkerEvent) => void,
): Promise<Failure | null> {
  const url = linkUrl(site.coordinator.url);
  const plain = checkPlainText(site, options.plainText);
  if (plain !== null) return plain;
  const secrets = await readSecrets(site);
  if (!secrets.ok) return secrets.failure;
  const ledgerFile = besideSiteFile(site.file, 'ledger');
  const writable = await checkLedgerWritable(ledgerFile);
  if (!writable.ok) return writable.failure;
  const keepable =
    options.memory === undefined ? succeed(null) : checkRowCache(besideSiteFile(site.file, 'rows'));
  if (!keepable.ok) return keepable.failure;
  const opened = await Ledger.open(ledgerOnDisk(ledgerFile), () => new Date());
  if (!opened.ok) return opened.failure;
  const { ledger, warning } = opened.value;
  if (warning !== null) onEvent({ event: 'warning', message: warning });
  const kernel = await kernelVariant(
    options.kernel ?? null,
    (message) => onEvent({ event: 'warning', message }),
    options.threads,
  );
  if (!kernel.ok) return kernel.failure;
  const answerer = answererOf(site, options, ledger, kernel.value, onEvent);
  return keepConnected({
    url,
    hello: {
      kind: 'hello',
      version: PROTOCOL_VERSION,
      site: site.site,
      shard: site.shard,
      software: SOFTWARE,
      kernel: kernelWords(kernel.value),
    },
    connect: () => connectLink({ url, ...secrets.value }),
    answerer,
    timers,
    random: Math.random,
    onEvent,
    stop: stopSignal(),
    graceMs: GRACE_MS,
    once: options.once,
  });
}

/** What the run's result says of the arithmetic here. */
function kernelWords({ name, threads = 1 }: KernelVariant): string {
  const words = `${name}, ${process.arch}, Node ${process.versions.node}`;
  return threads === 1 ? words : `${words}, ${threads} threads`;
}

function answererOf(
  site: SiteFile,
  options: JoinOptions,
  ledger: Ledger,
  kernel: KernelVariant,
  onEvent: (event: WorkerEvent) => void,
): Answerer {
  const approvalsFile = options.approvals ?? besideSiteFile(site.file, 'approvals');
  return createAnswerer({
    site: site.site,
    shard: site.shard,
    policy: site.policy,
    approved: async () => {
      if (site.policy.approvals === 'any') return succeed(new Set());
      const approvals = await readApprovals(approvalsFile);
      return approvals.ok ? succeed(new Set(approvals.value.map(({ digest }) => digest))) : approvals;
    },
    kernel,
    readTable: (request) => readTable(site.table, request),
    buildShard: shardBuilder(site, options.memory),
    ledger,
    nowMs: () => performance.now(),
    onEvent,
    pause: () => new Promise((resolve) => setImmediate(resolve)),
  });
}

function shardBuilder({ table, file }: SiteFile, memoryBytes: number | undefined): ShardBuilder {
  if (memoryBytes === undefined) {
    const bytesMost = machineMemory();
    return shardsInMemory((request) => readTable(table, request, bytesMost), bytesMost);
  }
  return boundedShards({
    memoryBytes,
    cachePath: besideSiteFile(file, 'rows'),
    readInParts: (request, take) => readInParts(table, request, memoryBytes, take),
    readTable: (request, bytesMost) => readTable(table, request, bytesMost),
  });
}

/** Bytes of memory that this process can have at all. */
function machineMemory(): number {
  const allowed = process.constrainedMemory();
  return allowed > 0 ? Math.min(allowed, totalmem()) : totalmem();
}

/** Where a coordinator takes workers, unless the site file names another path (behind a proxy). */
const LINK_PATH = '/v1/site';

function linkUrl(written: string): string {
  const url = new URL(written);
  if (url.pathname === '/') url.pathname = LINK_PATH;
  return url.href;
}

const LOOPBACK = /^(localhost|127(\.\d{1,3}){3}|\[::1\])$/;

/** The token goes over the link: in the clear only to this machine, or where the custodian says so by name. */
function checkPlainText(site: SiteFile, allowed: boolean): Failure | null {
  const { protocol, hostname } = new URL(site.coordinator.url);
  if (protocol === 'wss:' || allowed || LOOPBACK.test(hostname)) return null;
  return fail('field-value', `Found ${site.coordinator.url}, which would send the token unencrypted.`, {
    remedy: 'Use a wss:// address, or say --plain-text if the network between is trusted.',
    where: { file: site.file, field: 'coordinator.url' },
  }).failure;
}

const timers: Timers = {
  wait: async (ms, signal) => {
    try {
      await delay(ms, undefined, { signal });
    } catch (error) {
      if (!signal.aborted) throw error;
    }
  },
};

/** The first signal stops in good order; a second one at once. */
function stopSignal(): AbortSignal {
  const stop = new AbortController();
  const onSignal = (): void => {
    if (stop.signal.aborted) process.exit(EXIT.defect);
    stop.abort();
  };
  process.on('SIGTERM', onSignal);
  process.on('SIGINT', onSignal);
  return stop.signal;
}

/** Log lines to standard error: sentences with the time of day, or JSON lines. */
async function eventLog(json: boolean): Promise<(event: WorkerEvent) => void> {
  if (json) {
    const { pino } = await import('pino');
    const log = pino(
      { base: null, timestamp: pino.stdTimeFunctions.isoTime, formatters: { level: (level) => ({ level }) } },
      pino.destination({ dest: 2, sync: true }),
    );
    return (event) => log[levelOf(event)](event, sentenceOf(event));
  }
  return (event) => tell(`${new Date().toTimeString().slice(0, 8)}  ${sentenceOf(event)}`, 10);
}
