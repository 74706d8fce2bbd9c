import { z } from 'zod';
import { ask } from './round.js';
import { prepare, runEnd } from './run.js';
import { welcome } from './session.js';

/** Everything a coordinator may send. */
export const toWorker = z.discriminatedUnion('kind', [welcome, prepare, ask, runEnd]);
export type ToWorker = z.infer<typeof toWorker>;
