const FIRST = 0.1;
const FACTOR = 10;
/** The least damping worth the name: less counts as none. */
export const DAMPING_LEAST = 1e-3;
/** Rounds in a row without progress after which a run is called stalled. */
export const FAILURES_MOST = 30;

/**
 * Levenberg-Marquardt damping μ in H + μ diag H (Marquardt 1963): grows tenfold with every round that brings no
 * progress, shrinks tenfold with every one that does.
 */
export class Damping {
  amount = 0;
  /** Rounds in a row without progress. */
  failures = 0;

  succeeded(): void {
    this.amount = this.amount > DAMPING_LEAST ? this.amount / FACTOR : 0;
    this.failures = 0;
  }

  /** A step was found, but not where the model put it: the damping stays. */
  foundShorter(): void {
    this.failures = 0;
  }

  failed(): void {
    this.amount = Math.max(this.amount * FACTOR, FIRST);
    this.failures++;
  }
}
