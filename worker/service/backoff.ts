/**
 * How long to wait before the next try: exponential, with full jitter, so that the workers of a fleet do not come back
 * at one instant after the coordinator was away.
 */
export const BACKOFF = {
  /** Longest wait before the first try; doubles with each further one. Milliseconds. */
  firstMs: 500,
  mostMs: 30_000,
  /** A link that was up for this long has worked, whatever it was used for. Longer than any wait. Milliseconds. */
  steadyMs: 60_000,
} as const;

/** `attempt`: 1 for the first try after a link that worked (`LinkUse`). `uniform`: a random number in [0, 1). Milliseconds. */
export function backoffMs(attempt: number, uniform: number): number {
  const ceiling = Math.min(BACKOFF.mostMs, BACKOFF.firstMs * 2 ** Math.min(attempt - 1, 16));
  return Math.round(uniform * ceiling);
}
