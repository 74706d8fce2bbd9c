import type { LogEvent } from '../run/log-event.js';
import { listed, shortened, wrapped } from './phrases.js';

/** Who is awaited, as far as the log has said it: an arrival says how many are to come, and no list is said again. */
export class Presence {
  private awaited: ReadonlySet<string> = new Set();

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

  /** After a restart of the coordinator everyone has to come again. */
  forget(): void {
    this.awaited = new Set();
  }
}

/** Names short enough that two stand on a line of a paragraph. */
export const namesWithin = (sites: readonly string[], width: number): string[] =>
  sites.map((site) => shortened(site, Math.floor(width / 2) - 4));
