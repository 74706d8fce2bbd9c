import type { HostTime } from '../../coordinator/service/host-parts.js';

interface Timer {
  readonly atMs: number;
  readonly made: number;
  readonly call: () => void;
}

/** Time that passes only when the test lets it, in whole milliseconds; timers in order of their time, then of their making. */
export class VirtualTime implements HostTime {
  private nowMs = 0;
  private made = 0;
  private readonly timers = new Set<Timer>();

  wallMs(): number {
    return Date.UTC(2026, 0, 1) + this.nowMs;
  }

  steadyMs(): number {
    return this.nowMs;
  }

  after(delayMs: number, call: () => void): () => void {
    const timer = { atMs: this.nowMs + Math.ceil(delayMs), made: this.made, call };
    this.made += 1;
    this.timers.add(timer);
    return () => this.timers.delete(timer);
  }

  /** Lets promises settle, then runs timers one by one until `done`, or until `untilMs`. */
  async pass(untilMs: number, done: () => boolean = () => false): Promise<void> {
    for (;;) {
      await settled();
      if (done()) return;
      const next = this.next();
      if (next === null || next.atMs > untilMs) {
        this.nowMs = Math.max(this.nowMs, untilMs);
        return;
      }
      this.timers.delete(next);
      this.nowMs = Math.max(this.nowMs, next.atMs);
      next.call();
    }
  }

  private next(): Timer | null {
    let first: Timer | null = null;
    for (const timer of this.timers) {
      const sooner = first === null || timer.atMs < first.atMs;
      if (sooner || (timer.atMs === first?.atMs && timer.made < first.made)) first = timer;
    }
    return first;
  }
}

/** All promise callbacks that can run have run. */
const settled = (): Promise<void> => new Promise((resolve) => setImmediate(resolve));
