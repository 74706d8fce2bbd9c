import { z } from 'zod';

const count = z.int().min(1);
const milliseconds = z.int().min(1);

/** What `commonfit serve` may be told; each with its default, meaning and unit. */
export const serviceSettings = z.strictObject({
  /** Folder that holds tokens, runs and journals. */
  state: z.string().default('./commonfit-state'),
  /** Address to listen on. Off loopback it must have a certificate, or `plainText`. */
  host: z.string().default('127.0.0.1'),
  /** TCP port; 0 takes any that is free. */
  port: z.int().min(0).max(65_535).default(7443),
  /** PEM files of the certificate chain and its key: both or neither. */
  certFile: z.string().optional(),
  keyFile: z.string().optional(),
  /** PEM file of the authority whose certificates workers and analysts must show. Needs a certificate of our own. */
  clientCaFile: z.string().optional(),
  /** Plain text off loopback, where something in front does TLS. */
  plainText: z.boolean().default(false),
  /** Runs that may be past their waiting state at once. */
  runningMost: count.default(8),
  /** Runs that may wait, for their sites or their turn. */
  waitingMost: count.default(100),
  /** Links of workers at once. */
  linksMost: count.default(512),
  /** Links of one site at once, greeted or not. */
  linksPerSiteMost: count.default(128),
  /** Links that one site's token may open: a minute, and at once. */
  linksPerMinuteMost: count.default(300),
  /** Connections at once that are no links of workers, over all addresses. */
  connectionsMost: count.default(1024),
  /** Those of one address. */
  connectionsPerAddressMost: count.default(256),
  /** Requests of one analyst: a minute, and at once. */
  requestsPerMinuteMost: count.default(600),
  /** Requests without a good token or certificate that are answered with the reason, of one address: a minute, and at once. */
  refusalsPerMinuteMost: count.default(120),
  /** Open streams of the round log at once. */
  streamsMost: count.default(64),
  /** Those of one analyst. */
  streamsPerAnalystMost: count.default(16),
  /** From a connection, or its last request, to the whole head of a request; the TLS handshake too. Milliseconds. */
  headDeadlineMs: milliseconds.default(10_000),
  /** From a connection, or its last request, to the whole of a request. Milliseconds. */
  requestDeadlineMs: milliseconds.default(60_000),
  /** How long a reply or an event may wait for its reader. Milliseconds. */
  readDeadlineMs: milliseconds.default(60_000),
  /** Level of the operational log on standard error. */
  logLevel: z.enum(['debug', 'info', 'warn', 'error', 'silent']).default('info'),
  /** Its form: JSON objects, or sentences for people. */
  log: z.enum(['json', 'plain']).default('json'),
});

export type ServiceOptions = z.input<typeof serviceSettings>;
export type ServiceSettings = z.output<typeof serviceSettings>;
