import { checkRoster } from '../panel/roster.js';
import type { Member } from '../run/run.js';
import type { HostParts } from './host-parts.js';

export interface WaitingReports {
  waiting(missing: readonly string[]): void;
  ready(roster: readonly Member[]): void;
  giveUp(missing: readonly string[]): void;
}

/**
 * Where a run waits for its members and its turn. Patience runs only while members are missing: waiting for a turn is
 * not their fault.
 */
export class WaitingRoom {
  private readonly sinceMs: number;
  private said: string | null = null;
  private stopTimer: () => void = () => {};
  private closed = false;

  constructor(
    private readonly parts: Pick<HostParts, 'accepted' | 'time' | 'connected' | 'mayStart'>,
    private readonly reports: WaitingReports,
  ) {
    this.sinceMs = parts.time.steadyMs();
  }

  /** To be called at the start and after every change of who is connected. */
  check(): void {
    if (this.closed) return;
    this.stopTimer();
    const { accepted, time } = this.parts;
    const { specification } = accepted;
    const { deadlineMs, patienceMs } = specification.barrier;
    const waitedMs = time.steadyMs() - this.sinceMs;
    const connected = this.parts.connected().map(({ member }) => member);
    const found = checkRoster(specification, connected, waitedMs);
    if (found.ready) {
      if (this.parts.mayStart()) {
        this.close();
        this.reports.ready(found.roster);
      }
      return;
    }
    if (waitedMs >= patienceMs && found.missing.length > 0) {
      this.close();
      this.reports.giveUp(found.missing);
      return;
    }
    this.say(found.missing);
    const nextMs = found.missing.length === 0 ? deadlineMs - waitedMs : patienceMs - waitedMs;
    this.stopTimer = time.after(Math.max(0, nextMs), () => this.check());
  }

  close(): void {
    this.closed = true;
    this.stopTimer();
  }

  private say(missing: readonly string[]): void {
    const text = missing.join(', ');
    if (missing.length === 0 || text === this.said) return;
    this.said = text;
    this.reports.waiting(missing);
  }
}
