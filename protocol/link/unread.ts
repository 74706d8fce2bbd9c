import { LIMITS } from '../limits.js';

/**
 * Finds a peer that does not read: what waits for it must be taken within `allowedMs` and one second more for every
 * `LIMITS.readBytesPerSecondLeast` of it, so that a large frame on a slow line is no offence.
 */
export class UnreadWatch {
  /** What was queued in all when the present term began, and when that must have been taken; null: nothing waits. */
  private term: { readonly queued: number; readonly endsMs: number } | null = null;

  constructor(private readonly allowedMs: number) {}

  /**
   * Whether the peer has let its term pass. To be called now and then, with a time that does not go back (milliseconds),
   * the bytes queued in all so far and those of them that wait.
   */
  overdue(nowMs: number, queued: number, waiting: number): boolean {
    if (waiting === 0) {
      this.term = null;
      return false;
    }
    if (this.term !== null && queued - waiting < this.term.queued) return nowMs >= this.term.endsMs;
    const forBytesMs = (waiting / LIMITS.readBytesPerSecondLeast) * 1000;
    this.term = { queued, endsMs: nowMs + this.allowedMs + forBytesMs };
    return false;
  }
}
