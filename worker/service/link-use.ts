import { CLOSE_CODES } from '../../protocol/close-codes.js';
import type { Answer, Refusal } from '../../protocol/messages/round.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';

/** Runs of which one link remembers what it answered: more than a worker keeps at once. */
const RUNS_MOST = 64;

/** Ends that say that this worker's own messages were at fault. */
const FAULTS: ReadonlySet<number> = new Set([
  CLOSE_CODES.messageUnexpected,
  CLOSE_CODES.frameMalformed,
  CLOSE_CODES.frameTooLarge,
]);

/**
 * Whether a link has worked, so that the waits after its loss begin anew: the coordinator took an answer (a later ask
 * of the same run came, or the end of the run), or the link stayed up for `BACKOFF.steadyMs`. A welcome alone is not
 * enough: a worker all of whose answers close the link would come back twice a second for ever.
 */
export class LinkUse {
  /** Highest ask answered on this link, by run; longest unused first. */
  readonly #answered = new Map<string, number>();
  #accepted = false;
  #steady = false;

  sent({ run, ask }: Answer | Refusal): void {
    const highest = Math.max(ask, this.#answered.get(run) ?? 0);
    this.#answered.delete(run);
    this.#answered.set(run, highest);
    const [oldest] = this.#answered.keys();
    if (this.#answered.size > RUNS_MOST) this.#answered.delete(oldest);
  }

  received(message: ToWorker): void {
    if (message.kind !== 'ask' && message.kind !== 'run-end') return;
    const answered = this.#answered.get(message.run);
    if (answered === undefined) return;
    if (message.kind === 'run-end' || message.ask > answered) this.#accepted = true;
  }

  stayedUp(): void {
    this.#steady = true;
  }

  /** `closeCode`: the one that ended the link. */
  worked(closeCode: number): boolean {
    return this.#steady || (this.#accepted && !FAULTS.has(closeCode));
  }
}
