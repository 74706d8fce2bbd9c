import { z } from 'zod';
import { PROTOCOL_VERSION } from '../version.js';
import { count } from './vector.js';

/** First message of a worker on a new link. */
export const hello = z.strictObject({
  kind: z.literal('hello'),
  version: z.literal(PROTOCOL_VERSION),
  site: z.string().min(1).max(64),
  shard: z.strictObject({ index: z.int().min(1), of: z.int().min(1) }),
  software: z.string().max(200),
  /** The numerical kernel in use, recorded with the result. */
  kernel: z.string().max(200),
});

/** The coordinator's reply to `hello`. */
export const welcome = z.strictObject({
  kind: z.literal('welcome'),
  version: z.literal(PROTOCOL_VERSION),
  software: z.string().max(200),
  frameBytesMost: count,
});

export type Hello = z.infer<typeof hello>;
export type Welcome = z.infer<typeof welcome>;
