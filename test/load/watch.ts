import { readFile } from 'node:fs/promises';
import { setTimeout as delay } from 'node:timers/promises';

/** Resident memory of a process, by the kernel's account (Linux). MiB. */
export async function residentMiB(pid: number): Promise<number> {
  const kilobytes = /^VmRSS:\s+(\d+) kB$/m.exec(await readFile(`/proc/${pid}/status`, 'utf8'))?.[1];
  if (kilobytes === undefined) throw new Error(`no resident memory of process ${pid}`);
  return Number(kilobytes) / 1024;
}

export interface Watched {
  /** Highest seen. MiB. */
  readonly residentMostMiB: number;
  /** How long the health route took to answer. Milliseconds. */
  readonly healthMs: { readonly median: number; readonly p99: number; readonly most: number };
  readonly healthAsked: number;
}

const LOOK_EVERY_MS = 20;
const HEALTH_DEADLINE_MS = 10_000;

/** Looks at the service until told to stop: its memory, and whether it answers. One that does not answer throws. */
export function watchService(address: string, pid: number): { stop(): Promise<Watched> } {
  let stopped = false;
  let residentMostMiB = 0;
  const tookMs: number[] = [];
  const looking = (async () => {
    while (!stopped) {
      const started = performance.now();
      const response = await fetch(`${address}/health/live`, {
        signal: AbortSignal.timeout(HEALTH_DEADLINE_MS),
      });
      await response.text();
      if (response.status !== 200) throw new Error(`the health route answered ${response.status}`);
      tookMs.push(performance.now() - started);
      residentMostMiB = Math.max(residentMostMiB, await residentMiB(pid));
      await delay(LOOK_EVERY_MS);
    }
  })();
  return {
    stop: async () => {
      stopped = true;
      await looking;
      tookMs.sort((a, b) => a - b);
      const at = (share: number): number =>
        tookMs[Math.min(tookMs.length - 1, Math.floor(share * tookMs.length))] ?? 0;
      const healthMs = { median: at(0.5), p99: at(0.99), most: at(1) };
      return { residentMostMiB, healthMs, healthAsked: tookMs.length };
    },
  };
}
