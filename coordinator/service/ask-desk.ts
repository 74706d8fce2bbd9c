import { checkAnswer } from '../../protocol/check-answer.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import type { Answer, Ask, Refusal } from '../../protocol/messages/round.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { Measured } from '../journal/records.js';
import { openPanel } from '../panel/member.js';
import { mayOpen, step, wakeAtMs } from '../panel/panel.js';
import { isRefusal, type PanelEffect, type PanelEvent, type PanelState } from '../panel/panel-state.js';
import { type Batch, type Member, memberName, type RunAsk } from '../run/run.js';
import type { OwedAsk } from './drive.js';
import type { HostParts, LinkedMember } from './host-parts.js';
import { MemberLink } from './member-link.js';

/** What the desk reports to its run. */
export interface DeskReports {
  pass(asked: RunAsk, ask: number, batch: Batch, measured: Measured): void;
  giveUp(members: readonly string[], waitedMs: number): void;
  late(members: readonly string[], waitedMs: number, patienceLeftMs: number): void;
}

/** Carries the asks of a running run to its members and their replies back: the panel with its links and its timer. */
export class AskDesk {
  private panel: PanelState;
  private readonly names: readonly string[];
  /** By name, the place in the roster. */
  private readonly places: ReadonlyMap<string, number>;
  private readonly links = new Map<number, MemberLink>();
  private current: { readonly ask: number; readonly asked: RunAsk } | null = null;
  /** Per member: its newest ask. */
  private readonly newest: (OwedAsk | null)[];
  private numbersDown = 0;
  /** By member: its newest ask, and when that was first sent. */
  private readonly sent = new Map<number, { readonly ask: number; readonly atMs: number }>();
  /** When the panel is to be told of the time, as far as that is arranged. */
  private timer: { readonly wakeMs: number; readonly stop: () => void } | null = null;
  private readonly queue: PanelEvent[] = [];
  private draining = false;
  private stopped = false;

  constructor(
    private readonly parts: Pick<HostParts, 'accepted' | 'time' | 'notice' | 'answered'>,
    private readonly roster: readonly Member[],
    private readonly reports: DeskReports,
  ) {
    const { deadlineMs, patienceMs, missing } = parts.accepted.specification.barrier;
    const sites = roster.map(({ site }) => site);
    this.panel = openPanel(sites, { deadlineMs, patienceMs, missing });
    this.names = roster.map(memberName);
    this.places = new Map(roster.map((member, index) => [placeKey(member), index]));
    this.newest = roster.map(() => null);
  }

  /** What a run taken up again left open: who is gone, and who owes the reply to an ask before the one that comes. */
  resume(owed: readonly (OwedAsk | null)[], gone: Iterable<number>): void {
    const atMs = this.parts.time.steadyMs();
    for (const member of gone) this.take({ kind: 'gone', member, atMs });
    for (const [member, own] of owed.entries()) {
      if (own === null) continue;
      this.newest[member] = own;
      this.take({ kind: 'owes', member, ask: own.ask, atMs });
    }
  }

  open(ask: number, asked: RunAsk): void {
    const { works, scaling, barrier } = asked;
    this.current = { ask, asked };
    this.numbersDown = 0;
    const members = works.flatMap((own, member) => (own === null ? [] : [member]));
    for (const [member, own] of works.entries())
      if (own !== null) this.newest[member] = { ask, works: own, scaling };
    this.take({ kind: 'ask', ask, asked: members, ...barrier, atMs: this.parts.time.steadyMs() });
  }

  /** True when the member is one of this run's. */
  connected(linked: LinkedMember): boolean {
    const index = this.indexOf(linked);
    if (index < 0) return false;
    if (this.panel.members[index].gone) {
      const message = `${this.names[index]} came after the run went on without it.`;
      this.parts.notice({ level: 'info', message, site: this.names[index] });
      return false;
    }
    const { kernel } = this.roster[index];
    if (kernel !== linked.member.kernel) {
      const message = `The kernel is ${linked.member.kernel} now; the run started with ${kernel}.`;
      this.parts.notice({ level: 'warn', message, site: this.names[index] });
    }
    this.links.set(index, new MemberLink(linked, this.parts.accepted));
    this.take({ kind: 'connected', member: index, atMs: this.parts.time.steadyMs() });
    return true;
  }

  /** True when it was the present connection of one of this run's members. */
  lost(linked: LinkedMember): boolean {
    const index = this.indexOf(linked);
    if (this.links.get(index)?.linked !== linked) return false;
    this.links.delete(index);
    this.take({ kind: 'lost', member: index, atMs: this.parts.time.steadyMs() });
    return true;
  }

  /** An answer that does not fit its ask closes the connection it came on and counts for nothing. */
  receive(linked: LinkedMember, message: Answer | Refusal): void {
    const index = this.indexOf(linked);
    const link = this.links.get(index);
    if (link?.linked !== linked) return;
    if (message.kind === 'answer' && !this.fits(link, index, message)) return;
    this.tellAnswered(index, message);
    this.take({
      kind: 'reply',
      member: index,
      ask: message.ask,
      reply: message.kind === 'answer' ? message.work : message,
      atMs: this.parts.time.steadyMs(),
    });
  }

  private tellAnswered(index: number, { kind, ask }: Answer | Refusal): void {
    const sent = this.sent.get(index);
    if (kind !== 'answer' || sent?.ask !== ask) return;
    this.sent.delete(index);
    this.parts.answered?.(this.roster[index].site, this.parts.time.steadyMs() - sent.atMs);
  }

  /** Asks nothing more; with an outcome, tells the members. */
  stop(outcome: string | null): void {
    const again = this.stopped;
    this.stopped = true;
    this.timer?.stop();
    this.timer = null;
    if (again || outcome === null) return;
    for (const link of this.links.values()) link.end(outcome);
  }

  private fits(link: MemberLink, index: number, answer: Answer): boolean {
    const newest = this.newest[index];
    if (newest === null || answer.ask !== newest.ask) return true;
    const { scaling, works } = newest;
    const { run, specification } = this.parts.accepted;
    const intercept = specification.intercept === 'shared' ? 1 : 0;
    const p = scaling === null ? null : scaling.kept.length + intercept;
    const asked: Ask = { kind: 'ask', run, ask: newest.ask, work: [...works] };
    const failure = checkAnswer(asked, answer, p);
    if (failure === null) {
      link.answered(answer.ask, answer.work);
      return true;
    }
    const { code, message } = failure;
    this.parts.notice({ level: 'warn', code, message, site: this.names[index], detail: failure.where });
    link.linked.close(CLOSE_CODES.messageUnexpected, code);
    return false;
  }

  /** Effects may call back in (a memory link answers at once), so events wait their turn. */
  private take(event: PanelEvent): void {
    this.queue.push(event);
    if (this.draining) return;
    this.draining = true;
    for (let next = this.queue.shift(); next !== undefined && !this.stopped; next = this.queue.shift()) {
      const { state, effects } = step(this.panel, next);
      this.panel = state;
      if (next.kind !== 'reply' || this.timer === null || mayOpen(state)) this.setTimer();
      for (const effect of effects) this.perform(effect);
    }
    this.draining = false;
  }

  private perform(effect: PanelEffect): void {
    const { current } = this;
    switch (effect.kind) {
      case 'send':
        this.send(effect);
        return;
      case 'drop': {
        const message = `A reply to ask ${effect.ask} was dropped: ${effect.why}.`;
        const level = effect.why === 'unasked' ? 'warn' : 'debug';
        this.parts.notice({ level, code: effect.code, message, site: this.names[effect.member] });
        return;
      }
      case 'late':
        this.reports.late(this.namesOf(effect.members), effect.waitedMs, effect.patienceLeftMs);
        return;
      case 'give-up':
        this.reports.giveUp(this.namesOf(effect.members), effect.waitedMs);
        return;
      case 'pass':
        if (current !== null)
          this.reports.pass(current.asked, current.ask, effect.batch, this.measure(effect));
        for (const member of effect.batch.gone) this.dismiss(member);
        return;
    }
  }

  private send({ member, ask, lacks }: Extract<PanelEffect, { kind: 'send' }>): void {
    const newest = this.newest[member];
    // a newer one is in the line, and goes out in its turn
    if (newest?.ask !== ask) return;
    this.numbersDown += this.links.get(member)?.ask(ask, newest.works, newest.scaling, lacks) ?? 0;
    if (this.sent.get(member)?.ask !== ask) this.sent.set(member, { ask, atMs: this.parts.time.steadyMs() });
  }

  /** For a member that is gone the run is over. */
  private dismiss(member: number): void {
    this.links.get(member)?.end('site-missing');
    this.links.delete(member);
  }

  private measure({ batch, tookMs, slowest }: Extract<PanelEffect, { kind: 'pass' }>): Measured {
    let numbersUp = 0;
    for (const reply of batch.replies) {
      if (reply === null || isRefusal(reply)) continue;
      for (const answer of reply) numbersUp += numbersOfAnswer(answer);
    }
    const at = new Date(this.parts.time.wallMs()).toISOString();
    return { tookMs, slowest, numbersUp, numbersDown: this.numbersDown, at };
  }

  private setTimer(): void {
    const wakeMs = wakeAtMs(this.panel);
    if (wakeMs === (this.timer?.wakeMs ?? null)) return;
    this.timer?.stop();
    this.timer = null;
    if (wakeMs === null) return;
    const { time } = this.parts;
    const stop = time.after(Math.max(0, wakeMs - time.steadyMs()), () => {
      this.timer = null;
      this.take({ kind: 'time', atMs: time.steadyMs() });
    });
    this.timer = { wakeMs, stop };
  }

  private indexOf(linked: LinkedMember): number {
    return this.places.get(placeKey(linked.member)) ?? -1;
  }

  private namesOf(members: readonly number[]): string[] {
    return members.map((member) => this.names[member]);
  }
}

const placeKey = ({ site, shard }: Pick<Member, 'site' | 'shard'>): string =>
  `${site} ${shard.index}/${shard.of}`;
