import { checkAnswer } from '../../protocol/check-answer.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import type { Answer, Ask, Refusal } from '../../protocol/messages/round.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { Measured } from '../journal/records.js';
import {
  isRefusal,
  openPanel,
  type PanelEffect,
  type PanelEvent,
  type PanelState,
  type Reply,
  step,
  wakeAtMs,
} from '../panel/panel.js';
import { type Member, memberName, type RunAsk } from '../run/run.js';
import type { HostParts, LinkedMember } from './host-parts.js';
import { MemberLink } from './member-link.js';

/** What the desk reports to its run. */
export interface DeskReports {
  pass(asked: RunAsk, ask: number, replies: readonly Reply[], measured: Measured): void;
  giveUp(members: readonly string[], waitedMs: number): void;
  late(members: readonly string[], waitedMs: number, patienceLeftMs: number): void;
}

/** Carries the asks of a running run to its members and their replies back: the panel with its links and its timer. */
export class AskDesk {
  private panel: PanelState;
  private readonly names: readonly string[];
  private readonly links = new Map<number, MemberLink>();
  private current: { readonly ask: number; readonly asked: RunAsk } | null = null;
  private numbersDown = 0;
  private stopTimer: () => void = () => {};
  private readonly queue: PanelEvent[] = [];
  private draining = false;
  private stopped = false;

  constructor(
    private readonly parts: Pick<HostParts, 'accepted' | 'time' | 'notice'>,
    private readonly roster: readonly Member[],
    private readonly reports: DeskReports,
  ) {
    const { deadlineMs, patienceMs } = parts.accepted.specification.barrier;
    this.panel = openPanel(roster.length, { deadlineMs, patienceMs });
    this.names = roster.map(memberName);
  }

  open(ask: number, asked: RunAsk): void {
    this.current = { ask, asked };
    this.numbersDown = 0;
    this.take({ kind: 'ask', ask, atMs: this.parts.time.steadyMs() });
  }

  /** True when the member is one of this run's. */
  connected(linked: LinkedMember): boolean {
    const index = this.indexOf(linked);
    if (index < 0) return false;
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
    this.take({
      kind: 'reply',
      member: index,
      ask: message.ask,
      reply: message.kind === 'answer' ? message.work : message,
      atMs: this.parts.time.steadyMs(),
    });
  }

  /** Asks nothing more; with an outcome, tells the members. */
  stop(outcome: string | null): void {
    const again = this.stopped;
    this.stopped = true;
    this.stopTimer();
    if (again || outcome === null) return;
    for (const link of this.links.values()) link.end(outcome);
  }

  private fits(link: MemberLink, index: number, answer: Answer): boolean {
    const { current } = this;
    if (current === null || answer.ask !== current.ask) return true;
    const { scaling, works } = current.asked;
    const { run, specification } = this.parts.accepted;
    const intercept = specification.intercept === 'shared' ? 1 : 0;
    const p = scaling === null ? null : scaling.kept.length + intercept;
    const asked: Ask = { kind: 'ask', run, ask: current.ask, work: [...works[index]] };
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
      this.setTimer();
      for (const effect of effects) this.perform(effect);
    }
    this.draining = false;
  }

  private perform(effect: PanelEffect): void {
    const { current } = this;
    switch (effect.kind) {
      case 'send':
        if (current !== null) this.send(current.ask, current.asked, effect.member, effect.full);
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
          this.reports.pass(current.asked, current.ask, effect.replies, this.measure(effect));
        return;
    }
  }

  private send(ask: number, asked: RunAsk, member: number, full: boolean): void {
    const sent = this.links.get(member)?.ask(ask, asked.works[member], asked.scaling, full);
    this.numbersDown += sent ?? 0;
  }

  private measure({ replies, tookMs, slowest }: Extract<PanelEffect, { kind: 'pass' }>): Measured {
    let numbersUp = 0;
    for (const reply of replies) {
      if (isRefusal(reply)) continue;
      for (const answer of reply) numbersUp += numbersOfAnswer(answer);
    }
    const at = new Date(this.parts.time.wallMs()).toISOString();
    return { tookMs, slowest, numbersUp, numbersDown: this.numbersDown, at };
  }

  private setTimer(): void {
    this.stopTimer();
    const wakeMs = wakeAtMs(this.panel);
    if (wakeMs === null) return;
    const { time } = this.parts;
    this.stopTimer = time.after(Math.max(0, wakeMs - time.steadyMs()), () =>
      this.take({ kind: 'time', atMs: time.steadyMs() }),
    );
  }

  private indexOf(linked: LinkedMember): number {
    const { site, shard } = linked.member;
    return this.roster.findIndex(
      (member) => member.site === site && member.shard.index === shard.index && member.shard.of === shard.of,
    );
  }

  private namesOf(members: readonly number[]): string[] {
    return members.map((member) => this.names[member]);
  }
}
