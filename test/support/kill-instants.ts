import { readFileSync, statSync } from 'node:fs';
import { join } from 'node:path';
import { setTimeout as delay } from 'node:timers/promises';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { Random } from '../../numerics/random.js';
import { until } from './processes.js';
import type { Stage } from './stage.js';

/** When something is killed: a share of the undisturbed run's time, or of its journal's bytes. */
export interface Instant {
  readonly by: 'time' | 'journal';
  readonly share: number;
}

/** Half of the instants spread over the time of a run, half over the growth of its journal. */
export const drawInstants = (random: Random, count: number): Instant[] =>
  Array.from({ length: count }, (_, k) => ({
    by: k % 2 === 0 ? 'journal' : 'time',
    share: random.uniform(),
  }));

/** How long a struck run may take to its end where other tests keep the machine busy. Milliseconds. */
const END_PATIENCE_MS = 120_000;

/** How a run ended, from its folder, and how long it took. */
export interface EndedRun {
  readonly folder: string;
  readonly events: readonly LogEvent[];
  readonly result: string;
  readonly journalBytes: number;
  readonly tookMs: number;
}

async function call(stage: Stage, path: string, init: RequestInit = {}): Promise<unknown> {
  const token = (await stage.read('state/analyst.token')).trim();
  const headers = { authorization: `Bearer ${token}`, 'content-type': 'application/json' };
  const response = await fetch(`${stage.address}${path}`, { ...init, headers });
  if (!response.ok) throw new Error(`${path}: ${response.status} ${await response.text()}`);
  return response.json();
}

/** Waits until the workers of these sites are connected. */
export const connected = (stage: Stage, sites: readonly string[]): Promise<boolean> =>
  until('all sites connected', async () => {
    const known = (await call(stage, '/v1/sites')) as { sites: { site: string; connected: boolean }[] };
    return sites.every((name) => known.sites.some((one) => one.site === name && one.connected));
  });

/** A run submitted without a process of its own, so that it can be struck from its first millisecond on. */
export class StruckRun {
  private readonly since = performance.now();

  private constructor(readonly folder: string) {}

  static async submit(stage: Stage, file: string): Promise<StruckRun> {
    const body = JSON.stringify({ specification: await stage.read(file), file });
    const { run } = (await call(stage, '/v1/runs', { method: 'POST', body })) as { run: string };
    return new StruckRun(join(stage.folder, 'state', 'runs', run));
  }

  /** Waits for the instant; an ended run waits no longer. */
  async reach({ by, share }: Instant, undisturbed: EndedRun): Promise<void> {
    if (by === 'time') {
      await delay(Math.max(0, share * undisturbed.tookMs - (performance.now() - this.since)));
      return;
    }
    const bytes = share * undisturbed.journalBytes;
    while (this.journalBytes < bytes && !this.hasEnded) await delay(1);
  }

  get journalBytes(): number {
    return statSync(join(this.folder, 'journal'), { throwIfNoEntry: false })?.size ?? 0;
  }

  get events(): LogEvent[] {
    const text = readFileSync(join(this.folder, 'log.jsonl'), 'utf8');
    const whole = text.slice(0, text.lastIndexOf('\n') + 1);
    return whole
      .split('\n')
      .filter((line) => line !== '')
      .map((line) => JSON.parse(line));
  }

  get hasEnded(): boolean {
    return this.events.some(({ event }) => event === 'outcome');
  }

  async end(seen: () => string): Promise<EndedRun> {
    await until('the end of a run', () => this.hasEnded, seen, END_PATIENCE_MS);
    return {
      folder: this.folder,
      events: this.events,
      result: readFileSync(join(this.folder, 'result.json'), 'utf8'),
      journalBytes: this.journalBytes,
      tookMs: performance.now() - this.since,
    };
  }
}
