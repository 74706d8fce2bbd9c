import type { HostTime } from '../../coordinator/service/host-parts.js';

/** Time that passes only when the test lets it, timers in order of their time, then of their making. */
export class VirtualTime implements HostTime {
  private nowMs = 0;
  private made = 0;
  private readonly timers = new Map<number, { readonly atMs: number; readonly call: () => void }>();

  wallMs(): number {
    return Date.UTC(2026, 0, 1) + this.nowMs;
  }

  steadyMs(): number {
    return this.nowMs;
  }

  after(delayMs: number, call: () => void): () => void {
    const id = this.made;
    this.made += 1;
    this.timers.set(id, { atMs: this.nowMs + delayMs, call });
    return () => this.timers.delete(id);
  }

  /** Lets promises settle, then runs timers one by one until `done`, or until `untilMs`. */
  async pass(untilMs: number, done: () => boolean = () => false): Promise<void> {
    for (;;) {
      await settled();
      if (done()) return;
      const next = [...this.timers].sort(([a, first], [b, second]) => first.atMs - second.atMs || a - b)[0];
      if (next === undefined || next[1].atMs > untilMs) {
        this.nowMs = Math.max(this.nowMs, untilMs);
        return;
      }
      this.timers.delete(next[0]);
      this.nowMs = Math.max(this.nowMs, next[1].atMs);
      next[1].call();
    }
  }
}

/** All promise callbacks that can run have run. */
const settled = (): Promise<void> => new Promise((resolve) => setImmediate(resolve));
