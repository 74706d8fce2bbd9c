import { digestOfAsk, type Measured } from '../journal/records.js';
import type { Reply } from '../panel/panel.js';
import { NumbersTally } from '../panel/tally.js';
import type { Member, Run, RunAsk, RunEnd, Shown } from '../run/run.js';

/** Where a run's generator stands: at an ask, at its end, or broken by a defect of this program. */
export type Turn =
  | { readonly kind: 'ask'; readonly ask: number; readonly asked: RunAsk }
  | { readonly kind: 'end'; readonly end: RunEnd }
  | { readonly kind: 'defect'; readonly error: unknown };

/**
 * The generator of one run with what the host must know about it: the number of the ask, what has been shown, and the
 * numbers sent. Recorded and live answers go through the same steps.
 */
export class Drive {
  readonly tally: NumbersTally;
  survey: Extract<Shown, { kind: 'survey' }> | null = null;
  round = 0;
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
  }

  begin(): Turn {
    return this.turn(() => this.run.next());
  }

  /** Feeds the replies to the ask the run stands at; `measured` goes with what they show. */
  feed(asked: RunAsk, replies: readonly Reply[], measured: Measured): Turn {
    this.tally.add(this.ask, asked.works, replies);
    const turn = this.turn(() => this.run.next(replies));
    const shown = turn.kind === 'ask' ? turn.asked.shown : turn.kind === 'end' ? turn.end.shown : null;
    if (shown !== null) this.show(shown, measured);
    return turn;
  }

  digestOf(asked: RunAsk): string {
    return digestOfAsk(this.runId, this.ask, asked.works);
  }

  private show(shown: Shown, measured: Measured): void {
    if (shown.kind === 'survey') this.survey = shown;
    else this.round = shown.round;
    this.onShown(shown, measured);
  }

  private turn(next: () => IteratorResult<RunAsk, RunEnd>): Turn {
    try {
      const { done, value } = next();
      if (done) return { kind: 'end', end: value };
      this.ask += 1;
      return { kind: 'ask', ask: this.ask, asked: value };
    } catch (error) {
      return { kind: 'defect', error };
    }
  }
}
