import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { openTokens } from '../service/tokens.js';
import type { Analyst } from './analyst.js';
import { EXIT } from './exit-codes.js';
import { type Attempt, done, ending, machineFault } from './terminal.js';

/** A coordinator in this process, on a free port of loopback. */
export interface LocalCoordinator {
  readonly analyst: Analyst;
  /** What a site file has as the coordinator's address. */
  readonly siteUrl: string;
  admitSite(site: string): Promise<Attempt<string>>;
  close(): Promise<void>;
}

export async function startLocalCoordinator(state: string): Promise<Attempt<LocalCoordinator>> {
  // Loaded here: the other commands start faster without it.
  const { startService } = await import('../service/service.js');
  const started = await startService({ state, host: '127.0.0.1', port: 0, logLevel: 'error' });
  if (!started.ok) return ending(EXIT.machine, [started.failure]);
  const { address, close } = started.value;
  const file = join(state, 'analyst.token');
  const token = await machineFault('The token cannot be read', file, () => readFile(file, 'utf8'));
  if (!token.ok) {
    await close();
    return token;
  }
  const tokens = openTokens(state);
  return done({
    analyst: { url: address, token: token.value.trim(), ca: null, pair: null },
    siteUrl: `${address.replace(/^http/, 'ws')}/v1/site`,
    admitSite: async (site) => {
      const issued = await tokens.issue({ kind: 'site', name: site });
      return issued.ok ? done(issued.value) : ending(EXIT.machine, [issued.failure]);
    },
    close,
  });
}
