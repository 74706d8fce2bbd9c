import type { PanelSettings, Reply } from '../../coordinator/panel/panel-state.js';
import type { Batch } from '../../coordinator/run/run.js';

/** What a barrier let through, and when. */
export interface Passed {
  readonly atMs: number;
  readonly batch: Batch;
}

/**
 * The panel as its rules read, looked at millisecond by millisecond: no state of its own but what was asked and what has
 * come. Slow, and short enough to be believed.
 */
export class NaivePanel {
  barrier: {
    readonly asked: readonly number[];
    readonly waitFor: readonly number[];
    readonly quorum: number;
    readonly atMs: number;
    quorumAtMs: number | null;
  } | null = null;
  readonly owes: ({ readonly ask: number; readonly atMs: number } | null)[];
  readonly came: ({ readonly reply: Reply; readonly tookMs: number } | null)[];
  readonly gone: boolean[];
  private readonly silentSince: (number | null)[];

  constructor(
    private readonly sites: readonly string[],
    private readonly settings: PanelSettings,
  ) {
    this.owes = sites.map(() => null);
    this.came = sites.map(() => null);
    this.gone = sites.map(() => false);
    this.silentSince = sites.map(() => null);
  }

  ask(ask: number, asked: readonly number[], waitFor: readonly number[], quorum: number, atMs: number): void {
    for (const member of asked) {
      this.owes[member] = { ask, atMs };
      this.came[member] = null;
      this.silentSince[member] ??= atMs;
    }
    this.barrier = { asked, waitFor, quorum, atMs, quorumAtMs: null };
  }

  reply(member: number, ask: number, newest: number, reply: Reply, atMs: number): void {
    const owed = this.owes[member];
    if (this.gone[member]) return;
    if (ask < newest) this.silentSince[member] = owed?.atMs ?? null;
    if (owed?.ask !== ask) return;
    this.owes[member] = null;
    this.silentSince[member] = null;
    this.came[member] = { reply, tookMs: atMs - owed.atMs };
  }

  /** What happens at this moment, after all that was asked and has come. */
  at(atMs: number): Passed | 'given up' | null {
    if (this.barrier === null) return null;
    if (this.isOpen(atMs)) return this.pass(atMs, []);
    const silent = this.sites.filter((_, member) => {
      const since = this.silentSince[member];
      return since !== null && atMs - since >= this.settings.patienceMs;
    });
    if (silent.length === 0) return null;
    if (this.settings.missing === 'stop') return 'given up';
    return this.pass(
      atMs,
      [...this.sites.keys()].filter((member) => silent.includes(this.sites[member])),
    );
  }

  private isOpen(atMs: number): boolean {
    const { barrier } = this;
    if (barrier === null) return false;
    const { asked, waitFor, quorum } = barrier;
    const has = (member: number): boolean => this.came[member] !== null;
    const replied = asked.filter(has).length;
    if (waitFor.length === 0 && (asked.length === 0 || quorum === 0))
      return this.came.some((one) => one !== null);
    if (replied >= quorum) barrier.quorumAtMs ??= atMs;
    if (!waitFor.every(has)) return false;
    if (replied === asked.length) return true;
    return barrier.quorumAtMs !== null && atMs - barrier.atMs >= 3 * (barrier.quorumAtMs - barrier.atMs);
  }

  private pass(atMs: number, gone: readonly number[]): Passed {
    const replies = this.came.map((one) => one?.reply ?? null);
    const agesMs = this.came.map((one, member) => one?.tookMs ?? atMs - (this.silentSince[member] ?? atMs));
    this.barrier = null;
    this.came.fill(null);
    for (const member of gone) {
      this.gone[member] = true;
      this.owes[member] = null;
      this.silentSince[member] = null;
    }
    return { atMs, batch: { replies, agesMs, gone } };
  }
}
