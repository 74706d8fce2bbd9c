import type { Work } from '../../protocol/messages/round.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { digestOfAsk, type Measured } from '../journal/records.js';
import { NumbersTally } from '../panel/tally.js';
import type { ResultDocument } from '../run/result.js';
import {
  type Batch,
  type Member,
  memberName,
  type Run,
  type RunAsk,
  type RunEnd,
  type Shown,
} from '../run/run.js';

/** Where a run's generator stands: at an ask, at its end, or broken by a defect of this program. */
export type Turn =
  | { readonly kind: 'ask'; readonly ask: number; readonly asked: RunAsk }
  | { readonly kind: 'end'; readonly end: RunEnd }
  | { readonly kind: 'defect'; readonly error: unknown };

/** The newest ask of a member, while it owes the reply. */
export interface OwedAsk {
  readonly ask: number;
  readonly works: readonly Work[];
  readonly scaling: Scaling | null;
}

/**
 * The generator of one run with what the host must know about it: the number of the ask, who owes what, who is gone,
 * what has been shown, and the numbers sent. Recorded and live answers go through the same steps.
 */
export class Drive {
  readonly tally: NumbersTally;
  survey: Extract<Shown, { kind: 'survey' }> | null = null;
  /** Whom the run has gone on without. */
  without: ResultDocument['without'] = [];
  round = 0;
  /** Per member; null: it owes nothing. */
  readonly owed: (OwedAsk | null)[];
  /** Members given up on for good. */
  readonly gone = new Set<number>();
  private readonly run: Run;
  private ask = 0;

  constructor(
    private readonly runId: string,
    readonly roster: readonly Member[],
    start: (roster: readonly Member[]) => Run,
    private readonly onShown: (shown: Shown, measured: Measured) => void,
  ) {
    this.run = start(roster);
    this.tally = new NumbersTally(roster.length);
    this.owed = roster.map(() => null);
  }

  begin(): Turn {
    return this.turn(() => this.run.next());
  }

  /** Feeds what came to the ask the run stands at; `measured` goes with what it shows. */
  feed(asked: RunAsk, batch: Batch, measured: Measured): Turn {
    this.tally.add(asked.works, this.owedAsks(), batch.replies);
    for (const [member, reply] of batch.replies.entries()) if (reply !== null) this.owed[member] = null;
    for (const member of batch.gone) {
      this.owed[member] = null;
      this.gone.add(member);
    }
    const turn = this.turn(() => this.run.next(batch));
    const shown = turn.kind === 'ask' ? turn.asked.shown : turn.kind === 'end' ? turn.end.shown : null;
    if (shown !== null) this.show(shown, measured);
    return turn;
  }

  /** Per member, the number of the ask that it owes the reply to. */
  owedAsks(): (number | null)[] {
    return this.owed.map((owed) => owed?.ask ?? null);
  }

  /** Per member, what it owes from before the ask that the run stands at. */
  owedBefore(turn: Turn): (OwedAsk | null)[] {
    const ask = turn.kind === 'ask' ? turn.ask : this.ask + 1;
    return this.owed.map((owed) => (owed !== null && owed.ask < ask ? owed : null));
  }

  digestOf(asked: RunAsk): string {
    return digestOfAsk(this.runId, this.ask, asked.works);
  }

  private show(shown: Shown, measured: Measured): void {
    if (shown.kind === 'survey') this.survey = shown;
    else this.round = shown.round;
    if (shown.kind === 'without') {
      this.survey = null;
      this.without = [...this.without, ...shown.sites];
    }
    this.onShown(shown, measured);
  }

  private turn(next: () => IteratorResult<RunAsk, RunEnd>): Turn {
    try {
      const { done, value } = next();
      if (done) return { kind: 'end', end: value };
      this.ask += 1;
      this.owe(value);
      return { kind: 'ask', ask: this.ask, asked: value };
    } catch (error) {
      return { kind: 'defect', error };
    }
  }

  /** An ask that nobody could ever answer is a defect of the run: it would wait for ever. */
  private owe({ works, scaling, barrier }: RunAsk): void {
    for (const [member, own] of works.entries()) {
      if (own === null) continue;
      if (this.gone.has(member))
        throw new TypeError(`${memberName(this.roster[member])} is gone and is asked`);
      this.owed[member] = { ask: this.ask, works: own, scaling };
    }
    const idle = barrier.waitFor.find((member) => this.owed[member] === null);
    if (idle !== undefined || this.owed.every((owed) => owed === null)) {
      const who = idle === undefined ? 'anyone' : memberName(this.roster[idle]);
      throw new TypeError(`ask ${this.ask} waits for ${who}, who owes nothing`);
    }
  }
}
