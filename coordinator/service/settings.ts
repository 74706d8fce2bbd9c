import { z } from 'zod';

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
  /** Plain text off loopback, where something in front does TLS. */
  plainText: z.boolean().default(false),
  /** Runs that may be past their waiting state at once. */
  runningMost: z.int().min(1).default(8),
  /** Runs that may wait, for their sites or their turn. */
  waitingMost: z.int().min(1).default(100),
  /** Links of workers at once. */
  linksMost: z.int().min(1).default(256),
  /** Open streams of the round log at once. */
  streamsMost: z.int().min(1).default(64),
  /** Level of the operational log on standard error. */
  logLevel: z.enum(['debug', 'info', 'warn', 'error', 'silent']).default('info'),
});

export type ServiceOptions = z.input<typeof serviceSettings>;
export type ServiceSettings = z.output<typeof serviceSettings>;
