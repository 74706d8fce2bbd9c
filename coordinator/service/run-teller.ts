import type { Measured } from '../journal/records.js';
import { type Member, memberName, type RunEnd, type Shown } from '../run/run.js';
import type { HostParts } from './host-parts.js';
import { eventOfShown, outcomeEvent } from './round-events.js';

/** Writes the round log of one run: what happened, with the time. */
export class RunTeller {
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
    const { survey, round } = this.parts.logged;
    const known = shown.kind === 'survey' ? survey : shown.round <= round;
    if (known) return;
    const { most } = this.parts.accepted.specification.rounds;
    this.parts.log(eventOfShown(shown, measured, roster, most));
  }

  outcome(end: RunEnd, folder: string): void {
    this.parts.log(outcomeEvent(end, folder, this.now()));
  }

  private now(): string {
    return new Date(this.parts.time.wallMs()).toISOString();
  }
}
