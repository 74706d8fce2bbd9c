import type { Random } from '../../numerics/random.js';
import type { Cluster } from './cluster.js';
import { type Injected, one } from './faults.js';
import { LIES, type Lie } from './lies.js';
import type { SimWorker } from './sim-worker.js';

/** A fault that does not heal, and the worker or the run it is about. */
export type Lasting =
  | { readonly kind: 'gone'; readonly worker: SimWorker; readonly atMs: number }
  | { readonly kind: 'liar'; readonly worker: SimWorker; readonly lie: Lie }
  | { readonly kind: 'refuses'; readonly worker: SimWorker; readonly roundsMost: number }
  | { readonly kind: 'full ledger'; readonly worker: SimWorker; readonly atMs: number }
  | { readonly kind: 'cancelled'; readonly run: string; readonly atMs: number };

export const LASTING_KINDS = ['gone', 'liar', 'refuses', 'full ledger', 'cancelled'] as const;

export function lastingOf(kind: Lasting['kind'], site: string, cluster: Cluster, random: Random): Lasting {
  const atMs = 5000 * random.uniform();
  if (kind === 'cancelled') {
    const run = 'r1';
    cluster.after(atMs, () => cluster.coordinator?.cancel(run));
    return { kind, run, atMs };
  }
  const worker = cluster.workers.find(({ name }) => name.startsWith(site));
  if (worker === undefined) throw new Error(`no worker at ${site}`);
  switch (kind) {
    case 'gone':
      cluster.after(atMs, () => {
        cluster.gone.add(worker.name);
        worker.kill();
      });
      return { kind, worker, atMs };
    case 'liar':
      worker.liesAlways = one(random, LIES);
      return { kind, worker, lie: worker.liesAlways };
    case 'full ledger':
      cluster.after(atMs, () => cluster.fullLedgers.add(worker.name));
      return { kind, worker, atMs };
    case 'refuses': {
      const roundsMost = 1 + random.integer(8);
      worker.policy = { ...worker.policy, roundsMost };
      return { kind, worker, roundsMost };
    }
  }
}

export function asFault(lasting: Lasting | null): Injected[] {
  if (lasting === null) return [];
  const atMs = 'atMs' in lasting ? lasting.atMs : 0;
  const about = lasting.kind === 'cancelled' ? lasting.run : lasting.worker.name;
  const more =
    lasting.kind === 'liar' ? ` ${lasting.lie}` : lasting.kind === 'refuses' ? ` ${lasting.roundsMost}` : '';
  return [{ atMs, kind: `for good: ${lasting.kind}`, about: `${about}${more}` }];
}
