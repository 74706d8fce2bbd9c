import type { HostTime } from '../../coordinator/service/host-parts.js';
import type { VirtualTime } from '../support/virtual-time.js';

/**
 * One process that may be killed at any instant: from then on its timers stay silent and what it waits for never comes.
 * Its steady clock starts at its birth, its wall clock is off by `skewMs`.
 */
export class SimProcess implements HostTime {
  alive = true;
  private readonly bornMs: number;

  constructor(
    private readonly time: VirtualTime,
    private readonly skewMs: number,
  ) {
    this.bornMs = time.steadyMs();
  }

  wallMs(): number {
    return this.time.wallMs() + this.skewMs;
  }

  steadyMs(): number {
    return this.time.steadyMs() - this.bornMs;
  }

  after(delayMs: number, call: () => void): () => void {
    return this.time.after(delayMs, () => {
      if (this.alive) call();
    });
  }

  sleep(ms: number): Promise<void> {
    return new Promise((resolve) => this.after(ms, resolve));
  }

  /** Like `sleep`, and over at once when the signal is aborted. */
  wait(ms: number, signal: AbortSignal): Promise<void> {
    if (signal.aborted) return Promise.resolve();
    return new Promise((resolve) => {
      const end = (): void => {
        stop();
        signal.removeEventListener('abort', end);
        resolve();
      };
      const stop = this.after(ms, end);
      signal.addEventListener('abort', end, { once: true });
    });
  }
}
