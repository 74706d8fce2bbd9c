import type { FitSpecification } from '../../protocol/specification/types.js';
import type { ResultDocument } from './result.js';
import type { Before } from './rounds.js';
import {
  type Batch,
  type Member,
  memberName,
  type Run,
  type RunAsk,
  type RunEnd,
  type Shown,
} from './run.js';
import { Spending, type Spent } from './spending.js';

export type Without = ResultDocument['without'];

export interface Attempts {
  begin(present: readonly Member[], before: AttemptBefore, without: Without): Run;
  /** Ends the run `site-missing`, for this reason. */
  tooFew(present: readonly Member[], without: Without, reason: string): RunEnd;
}

export type AttemptBefore = Before & {
  readonly shown: Shown | null;
  /** Of each member present. */
  readonly spent: readonly Spent[];
};

/**
 * Drives attempts at a run: whenever members are given up on for good, the attempt in hand is dropped and another one
 * begins with the members that are left, since a site that is missing changes what is estimated. A site counts with all
 * its rows: where one of its shards is gone, so is the site. Ask numbers and rounds go on counting. Ends where fewer
 * sites are left than the specification asks for.
 */
export function* goingOnWithout(
  { sites }: Pick<FitSpecification, 'sites'>,
  roster: readonly Member[],
  attempts: Attempts,
): Run {
  const least = 'least' in sites ? sites.least : 1;
  let present = [...roster.keys()];
  let without: Without = [];
  const spending = roster.map(() => new Spending());
  let before: AttemptBefore = { asks: 0, rounds: 0, shown: null, spent: spending.map((own) => own.spent()) };
  for (;;) {
    const members = present.map((i) => roster[i]);
    const step = yield* untilGone(attempts.begin(members, before, without), present, spending);
    if (step.kind === 'end') return step.end;
    const gone = new Set(step.gone.map((i) => roster[i].site));
    const names = members.filter(({ site }) => gone.has(site)).map(memberName);
    present = present.filter((i) => !gone.has(roster[i].site));
    const left = names.map((site) => ({ site, rowsUsed: step.rowsOf(site) }));
    without = [...without, ...left];
    const rounds = before.rounds + step.rounds;
    before = {
      asks: before.asks + step.asks,
      rounds,
      shown: { kind: 'without', round: rounds, sites: left },
      spent: present.map((i) => spending[i].spent()),
    };
    const staying = present.map((i) => roster[i]);
    const count = new Set(staying.map(({ site }) => site)).size;
    if (count >= least) continue;
    const missing = without.map(({ site }) => site).join(', ');
    const reason = `no answer within the patience of the run from ${missing}; ${count} of at least ${least} sites are left. [site-missing]`;
    return attempts.tooFew(staying, without, reason);
  }
}

type Step =
  | { readonly kind: 'end'; readonly end: RunEnd }
  | {
      readonly kind: 'gone';
      /** Indices in the run's roster. */
      readonly gone: readonly number[];
      readonly asks: number;
      readonly rounds: number;
      readonly rowsOf: (site: string) => number | null;
    };

/** One attempt among the members present, until it ends or some of them are gone. */
function* untilGone(
  attempt: Run,
  present: readonly number[],
  spending: readonly Spending[],
): Generator<RunAsk, Step, Batch> {
  let asks = 0;
  let rounds = 0;
  let surveyed: Extract<Shown, { kind: 'survey' }> | null = null;
  for (let step = attempt.next(); ; ) {
    if (step.done) return { kind: 'end', end: step.value };
    const { shown } = step.value;
    if (shown?.kind === 'survey') surveyed = shown;
    if (step.value.stage === 'solve' && asks > 0) rounds++;
    const asked = amongAll(step.value, present, spending.length);
    const batch = yield asked;
    asks++;
    for (const [i, own] of asked.works.entries()) spending[i].add(own ?? [], batch.replies[i]);
    const gone = batch.gone.filter((i) => present.includes(i));
    if (gone.length > 0) {
      const rowsOf = (site: string): number | null =>
        surveyed?.sites.find((one) => one.site === site)?.rowsUsed ?? null;
      return { kind: 'gone', gone, asks, rounds: Math.max(0, rounds - 1), rowsOf };
    }
    step = attempt.next(amongPresent(batch, present));
  }
}

/** An ask to the members present, as one to the whole roster. */
function amongAll(ask: RunAsk, present: readonly number[], rosterCount: number): RunAsk {
  const works: RunAsk['works'][number][] = new Array(rosterCount).fill(null);
  for (const [at, i] of present.entries()) works[i] = ask.works[at];
  const waitFor = ask.barrier.waitFor.map((at) => present[at]);
  return { ...ask, works, barrier: { ...ask.barrier, waitFor } };
}

const amongPresent = ({ replies, agesMs }: Batch, present: readonly number[]): Batch => ({
  replies: present.map((i) => replies[i]),
  agesMs: present.map((i) => agesMs[i]),
  gone: [],
});
