import { z } from 'zod';
import { answer, refusal } from './round.js';
import { hello } from './session.js';

/** Everything a worker may send. */
export const toCoordinator = z.discriminatedUnion('kind', [hello, answer, refusal]);
export type ToCoordinator = z.infer<typeof toCoordinator>;
