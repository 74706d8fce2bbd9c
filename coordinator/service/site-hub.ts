import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { LIMITS } from '../../protocol/limits.js';
import type { Link } from '../../protocol/link/link.js';
import type { Answer, Refusal } from '../../protocol/messages/round.js';
import type { Hello } from '../../protocol/messages/session.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { PROTOCOL_VERSION, SOFTWARE } from '../../protocol/version.js';
import { type Member, memberName } from '../run/run.js';
import type { HostTime, LinkedMember, Notice } from './host-parts.js';

export interface HubReports {
  connected(linked: LinkedMember): void;
  lost(linked: LinkedMember): void;
  message(linked: LinkedMember, message: Answer | Refusal): void;
  notice(notice: Notice): void;
}

export interface SiteSummary {
  readonly site: string;
  readonly shard: { readonly index: number; readonly of: number };
  readonly connected: boolean;
  readonly software: string;
  readonly kernel: string;
}

export interface SiteTraffic {
  readonly sent: number;
  readonly received: number;
  readonly waiting: number;
  readonly links: number;
}

/** Shards a site may split its rows into. */
const SHARDS_MOST = 1000;

/**
 * All links to workers. A link counts once its `hello` names the site of its token; of two links of the same member
 * the one that was opened later wins. Members stay listed after their link is lost.
 */
export class SiteHub {
  private readonly present = new Map<string, LinkedMember>();
  private readonly seen = new Map<string, Omit<SiteSummary, 'connected'>>();
  private readonly links = new Set<Link<ToWorker, ToCoordinator>>();
  /** How many links were opened before a member's. */
  private readonly places = new WeakMap<LinkedMember, number>();
  private opened = 0;
  /** Of links that were closed, by the site of their token. */
  private readonly carried = new Map<string, { sent: number; received: number }>();
  private readonly siteOf = new WeakMap<Link<ToWorker, ToCoordinator>, string>();

  constructor(
    private readonly time: Pick<HostTime, 'after'>,
    private readonly reports: HubReports,
  ) {}

  /** Links there are, greeted or not. */
  get linkCount(): number {
    return this.links.size;
  }

  /** By site: payload bytes of all its links since the start, those that wait to be sent, and its links now. */
  traffic(): Map<string, SiteTraffic> {
    const all = new Map<string, SiteTraffic>();
    for (const [site, bytes] of this.carried) all.set(site, { ...bytes, waiting: 0, links: 0 });
    for (const link of this.links) {
      const site = this.siteOf.get(link) ?? '';
      const before = all.get(site) ?? { sent: 0, received: 0, waiting: 0, links: 0 };
      all.set(site, {
        sent: before.sent + link.bytesSent,
        received: before.received + link.bytesReceived,
        waiting: before.waiting + link.bytesWaiting,
        links: before.links + 1,
      });
    }
    return all;
  }

  connected(): readonly LinkedMember[] {
    return [...this.present.values()];
  }

  sites(): SiteSummary[] {
    return [...this.seen.values()].map((summary) => ({
      ...summary,
      connected: this.present.has(keyOf(summary)),
    }));
  }

  /** Takes a new link whose token speaks for `site`. */
  add(link: Link<ToWorker, ToCoordinator>, site: string): void {
    let linked: LinkedMember | null = null;
    const place = this.opened++;
    this.links.add(link);
    this.siteOf.set(link, site);
    const stopTimer = this.time.after(LIMITS.helloDeadlineMs, () =>
      link.close(CLOSE_CODES.helloLate, `no hello within ${LIMITS.helloDeadlineMs} ms`),
    );
    link.onClose((code, reason) => {
      stopTimer();
      this.links.delete(link);
      this.carry(link, site);
      if (linked !== null) this.remove(linked);
      const level = code === CLOSE_CODES.normal || code === CLOSE_CODES.goingAway ? 'info' : 'warn';
      this.reports.notice({
        level,
        message: `A link closed with code ${code}.`,
        site,
        detail: { code, reason },
      });
    });
    link.onMessage((message) => {
      if (message.kind !== 'hello') {
        if (linked === null) link.close(CLOSE_CODES.messageUnexpected, `${message.kind} before hello`);
        else this.reports.message(linked, message);
        return;
      }
      stopTimer();
      if (linked === null) linked = this.greet(link, place, site, message);
      else link.close(CLOSE_CODES.messageUnexpected, 'a second hello');
    });
  }

  /** Closes every link because the process is stopping. */
  close(): void {
    for (const link of this.links) link.close(CLOSE_CODES.goingAway, 'the coordinator is stopping');
  }

  private greet(
    link: Link<ToWorker, ToCoordinator>,
    place: number,
    site: string,
    hello: Hello,
  ): LinkedMember | null {
    const { shard, software, kernel } = hello;
    if (hello.site !== site) {
      link.close(CLOSE_CODES.tokenRefused, `the token is not one of site ${hello.site}`);
      return null;
    }
    if (shard.index > shard.of || shard.of > SHARDS_MOST) {
      link.close(
        CLOSE_CODES.messageUnexpected,
        `shard ${shard.index} of ${shard.of} (at most ${SHARDS_MOST})`,
      );
      return null;
    }
    const member: Member = { site, shard, kernel };
    const linked: LinkedMember = {
      member,
      send: (message) => link.send(message),
      close: (code, reason) => link.close(code, reason),
    };
    if (!this.takePlace(linked, place)) {
      link.close(CLOSE_CODES.replaced, 'a newer link of the same member');
      return null;
    }
    const { frameBytesMost } = LIMITS;
    link.send({ kind: 'welcome', version: PROTOCOL_VERSION, software: SOFTWARE, frameBytesMost });
    this.seen.set(memberName(member), { site, shard, software, kernel });
    const message = `${memberName(member)} connected (${software}, ${kernel}).`;
    this.reports.notice({ level: 'info', message, site });
    this.reports.connected(linked);
    return linked;
  }

  /**
   * False where the member has a link that was opened later: a hello may be under way for longer than its worker waits
   * for the welcome, and then comes after that of the worker's next link.
   */
  private takePlace(linked: LinkedMember, place: number): boolean {
    const name = keyOf(linked.member);
    const present = this.present.get(name);
    if (present !== undefined) {
      if ((this.places.get(present) ?? 0) > place) return false;
      this.remove(present);
      present.close(CLOSE_CODES.replaced, 'a newer link of the same member');
    }
    this.places.set(linked, place);
    this.present.set(name, linked);
    return true;
  }

  private carry(link: Link<ToWorker, ToCoordinator>, site: string): void {
    const before = this.carried.get(site) ?? { sent: 0, received: 0 };
    const { bytesSent, bytesReceived } = link;
    this.carried.set(site, { sent: before.sent + bytesSent, received: before.received + bytesReceived });
  }

  private remove(linked: LinkedMember): void {
    const name = keyOf(linked.member);
    if (this.present.get(name) !== linked) return;
    this.present.delete(name);
    this.reports.lost(linked);
  }
}

/** Two splits of one site (1 of 2, 1 of 3) are different members. */
const keyOf = ({ site, shard }: Pick<Member, 'site' | 'shard'>): string =>
  `${site} ${shard.index}/${shard.of}`;
