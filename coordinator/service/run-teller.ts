import type { Measured } from '../journal/records.js';
import { type Member, memberName, type RunEnd, type Shown } from '../run/run.js';
import type { HostParts } from './host-parts.js';
import { eventOfShown, outcomeEvent } from './round-events.js';

/** Writes the round log of one run: what happened, with the time. */
export class RunTeller {
  /** How often each has been shown, by the journal or since. */
  private surveys = 0;
  private withouts = 0;

  constructor(private readonly parts: Pick<HostParts, 'accepted' | 'time' | 'log' | 'logged'>) {}

  waiting(sites: readonly string[]): void {
    this.parts.log({ event: 'waiting', sites, at: this.now() });
  }

  site(member: Member, change: 'connected' | 'lost'): void {
    this.parts.log({ event: 'site', site: memberName(member), change, at: this.now() });
  }

  resumed(round: number): void {
    this.parts.log({ event: 'resumed', round, at: this.now() });
  }

  late(round: number, sites: readonly string[], waitedMs: number, patienceLeftMs: number): void {
    this.parts.log({ event: 'late', round, sites, waitedMs, patienceLeftMs, at: this.now() });
  }

  /** Says what a round has shown, unless the log had it before the run was taken up again. */
  shown(shown: Shown, measured: Measured, roster: readonly Member[]): void {
    if (this.isLogged(shown)) return;
    const { rounds, barrier } = this.parts.accepted.specification;
    const limits = { roundsMost: rounds.most, patienceMs: barrier.patienceMs };
    this.parts.log(eventOfShown(shown, measured, roster, limits));
  }

  private isLogged(shown: Shown): boolean {
    const { logged } = this.parts;
    switch (shown.kind) {
      case 'survey':
        this.surveys += 1;
        return this.surveys <= logged.surveys;
      case 'without':
        this.withouts += 1;
        return this.withouts <= logged.withouts;
      case 'round':
        return shown.round <= logged.round;
    }
  }

  outcome(end: RunEnd, folder: string): void {
    this.parts.log(outcomeEvent(end, folder, this.now()));
  }

  private now(): string {
    return new Date(this.parts.time.wallMs()).toISOString();
  }
}
