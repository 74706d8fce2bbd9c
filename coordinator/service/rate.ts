/** How often something may happen: `burst` at once, and `perMinute` in the long run. */
export interface Rate {
  readonly burst: number;
  readonly perMinute: number;
}

const MINUTE_MS = 60_000;

/**
 * A token bucket (Turner 1986, as a meter) for each key, for at most `keysMost` keys: beyond them the one that was asked
 * for least recently is forgotten, which gives it a full bucket again.
 */
export class RateLimiter {
  /** In the order of last use. */
  private readonly buckets = new Map<string, { readonly left: number; readonly atMs: number }>();

  constructor(
    private readonly rate: Rate,
    private readonly keysMost = 10_000,
  ) {}

  get size(): number {
    return this.buckets.size;
  }

  /** Takes one for `key`: 0, or the milliseconds until there will be one. `nowMs` does not go back. */
  take(key: string, nowMs: number): number {
    const { burst, perMinute } = this.rate;
    const before = this.buckets.get(key) ?? { left: burst, atMs: nowMs };
    const left = Math.min(burst, before.left + ((nowMs - before.atMs) * perMinute) / MINUTE_MS);
    const taken = left >= 1;
    this.buckets.delete(key);
    this.buckets.set(key, { left: taken ? left - 1 : left, atMs: nowMs });
    if (this.buckets.size > this.keysMost) this.forgetOldest();
    return taken ? 0 : ((1 - left) * MINUTE_MS) / perMinute;
  }

  private forgetOldest(): void {
    const [oldest] = this.buckets.keys();
    if (oldest !== undefined) this.buckets.delete(oldest);
  }
}
