import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import { refusalsOf } from './refusals.js';
import { type AfterSurvey, askAll, type Batch, type Member, type RunAsk, type Shown } from './run.js';
import type { Stop } from './survey.js';
import { numbersDown } from './traffic.js';

/** What a run had asked before an attempt's solve stage: asks, the survey's among them, and rounds. */
export interface Before {
  readonly asks: number;
  readonly rounds: number;
}

/** The rounds of one attempt after its survey: their numbers, the numbers that moved, and what the last one showed. */
export class Rounds {
  /** Rounds so far in this attempt. */
  count = 0;
  private problems = 0;
  readonly up: number[];
  readonly down: number[];

  constructor(
    readonly roster: readonly Member[],
    private readonly scaling: Scaling,
    private readonly before: Before,
    public shown: Shown,
  ) {
    this.up = roster.map(() => 0);
    this.down = roster.map(() => 0);
  }

  /** Numbers for so many problems that have not been asked about before: the first of them. */
  newProblems(count: number): number {
    const first = this.problems;
    this.problems += count;
    return first;
  }

  /** The number that the next ask will have. */
  get nextAsk(): number {
    return this.before.asks + this.count + 1;
  }

  /** The number of the latest round in the run. */
  get round(): number {
    return this.before.rounds + this.count;
  }

  /** Asks every member and waits for all: their answers in roster order, or why the run cannot go on. */
  *ask(
    stage: AfterSurvey,
    works: readonly (readonly Work[])[],
  ): Generator<RunAsk, readonly (readonly WorkAnswer[])[] | Stop, Batch> {
    this.sent(works);
    const { scaling, shown } = this;
    const { answers } = yield* askAll({ stage, works, scaling, shown });
    const refused = refusalsOf(answers, this.roster);
    return refused ?? this.came(answers as readonly (readonly WorkAnswer[])[]);
  }

  /** As `ask`, for a round that is for one thing and no part of an iteration. */
  *askOnce(
    stage: AfterSurvey,
    purpose: string,
    works: readonly (readonly Work[])[],
  ): Generator<RunAsk, readonly (readonly WorkAnswer[])[] | Stop, Batch> {
    const answers = yield* this.ask(stage, works);
    const { shown } = this;
    if (!isStop(answers) && shown.kind === 'round') {
      const progress = { ...shown.progress, purpose, relativeGap: null };
      this.shown = { ...shown, stage, round: this.round, progress, standIns: [] };
    }
    return answers;
  }

  /** Opens a round: what each member is sent in it. */
  sent(works: readonly (readonly Work[] | null)[]): void {
    const ask = this.nextAsk;
    this.count++;
    for (const [i, own] of works.entries())
      for (const work of own ?? []) this.down[i] += numbersDown(work, ask);
  }

  /** Counts what came, and passes it on. */
  came<T extends readonly WorkAnswer[] | null>(answers: readonly T[]): readonly T[] {
    for (const [i, own] of answers.entries())
      for (const answer of own ?? []) this.up[i] += numbersOfAnswer(answer);
    return answers;
  }
}

export const isStop = (value: object): value is Stop => 'outcome' in value;
