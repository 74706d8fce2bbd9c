/**
 * The newest ask of each run, for the rule that an older one is not answered. Bounded: of a run that had to make room
 * nothing is skipped, which costs time and no more.
 */
export class NewestAsks {
  /** Longest unused first. */
  readonly #asks = new Map<string, number>();
  readonly #runsMost: number;

  constructor(runsMost: number) {
    this.#runsMost = runsMost;
  }

  arrived({ run, ask }: { readonly run: string; readonly ask: number }): void {
    const newest = Math.max(ask, this.of(run));
    this.#asks.delete(run);
    for (const other of this.#asks.keys()) if (this.#asks.size >= this.#runsMost) this.#asks.delete(other);
    this.#asks.set(run, newest);
  }

  /** 0 where none is known. */
  of(run: string): number {
    return this.#asks.get(run) ?? 0;
  }

  forget(run: string): void {
    this.#asks.delete(run);
  }
}
