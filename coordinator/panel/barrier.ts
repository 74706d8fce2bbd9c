import type { Barrier } from '../run/run.js';

/** The grace for the others of a round ends when this many times as long has passed as the quorum took. */
const GRACE_FACTOR = 3;

/** The barrier of one ask: who was asked by it, and when. */
export interface OpenBarrier extends Barrier {
  /** Members asked now; others may owe the reply to an older ask. */
  readonly asked: readonly number[];
  readonly openedAtMs: number;
}

/**
 * When the barrier opens by the replies that have come so far, on the clock of `openedAtMs`; null: not without more of
 * them. `repliedAtMs`: per member, when the reply to its newest ask came, whether it was asked that now or before; null:
 * not yet. It opens when all of `waitFor` have replied, and of the members asked now either all have or `quorum` have
 * and the grace is over; where nobody is waited for in either way, at the first reply of anyone.
 */
export function opensAtMs(
  { waitFor, quorum, asked, openedAtMs }: OpenBarrier,
  repliedAtMs: readonly (number | null)[],
): number | null {
  const timesOf = (members: readonly number[]): number[] =>
    members.flatMap((member) => repliedAtMs[member] ?? []);
  const waited = timesOf(waitFor);
  if (waited.length < waitFor.length) return null;
  const came = timesOf(asked).sort((a, b) => a - b);
  if (waitFor.length === 0 && Math.min(asked.length, quorum) === 0) {
    const first = Math.min(...repliedAtMs.flatMap((atMs) => atMs ?? []));
    return first === Number.POSITIVE_INFINITY ? null : Math.max(openedAtMs, first);
  }
  const all = Math.max(openedAtMs, ...waited);
  if (came.length === asked.length) return Math.max(all, ...came);
  if (came.length < quorum) return null;
  const quorumTookMs = quorum === 0 ? 0 : came[quorum - 1] - openedAtMs;
  return Math.max(all, openedAtMs + GRACE_FACTOR * quorumTookMs);
}
