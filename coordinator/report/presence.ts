import type { LogEvent } from '../run/log-event.js';
import { duration, listed, shortened, wrapped } from './phrases.js';

/** A wait is said again when it has become this many times as long. */
const SAID_AGAIN_AT = 2;

/**
 * Who is awaited, as far as the log has said it: an arrival says how many are to come, no list is said again, and a long
 * wait for the same answers is said at ever longer intervals.
 */
export class Presence {
  private awaited: ReadonlySet<string> = new Set();
  private late = { what: '', waitedMs: 0 };

  constructor(private readonly width: number) {}

  waiting({ sites }: Extract<LogEvent, { event: 'waiting' }>): string[] {
    const known = sites.every((site) => this.awaited.has(site));
    this.awaited = new Set(sites);
    if (known) return [];
    return wrapped(`Waiting for ${listed(namesWithin(sites, this.width), 8)} to connect.`, this.width, 2);
  }

  arrived(site: string): string {
    const wasAwaited = this.awaited.has(site);
    this.awaited = new Set([...this.awaited].filter((other) => other !== site));
    const name = shortened(site, this.width - 32);
    const left = this.awaited.size;
    return wasAwaited && left > 0 ? `${name} is here; ${left} still to come.` : `${name} is here.`;
  }

  lost(site: string): string {
    return `The link to ${shortened(site, this.width - 24)} is gone.`;
  }

  stillOut(event: Extract<LogEvent, { event: 'late' }>): string[] {
    const what = [event.round, ...event.sites].join('\n');
    if (what === this.late.what && event.waitedMs < this.late.waitedMs * SAID_AGAIN_AT) return [];
    this.late = { what, waitedMs: event.waitedMs };
    const stage = event.round === 0 ? 'the survey' : `round ${event.round}`;
    const sites = listed(namesWithin(event.sites, this.width), 6);
    const text = `No answer yet from ${sites} in ${stage} after ${duration(event.waitedMs)}; asked again, and waiting for up to ${duration(event.patienceLeftMs)} more.`;
    return wrapped(text, this.width, 2);
  }

  /** After a restart of the coordinator everyone has to come again. */
  forget(): void {
    this.awaited = new Set();
    this.late = { what: '', waitedMs: 0 };
  }
}

/** Names short enough that two stand on a line of a paragraph. */
export const namesWithin = (sites: readonly string[], width: number): string[] =>
  sites.map((site) => shortened(site, Math.floor(width / 2) - 4));
