import type { EvaluateAnswer } from '../../protocol/messages/evaluate.js';
import type { FactorAnswer } from '../../protocol/messages/factor.js';
import type { ProximalAnswer, ProximalProblem } from '../../protocol/messages/proximal.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { MethodAsk, MethodEnd, SiteAnswers } from '../consensus/method.js';
import { EvaluateGroups, type Scope } from './evaluate-groups.js';

/** One problem: its method, and the rows it is about. */
export interface LockstepProblem<E extends object = MethodEnd> extends Scope {
  readonly method: Generator<MethodAsk, E, SiteAnswers>;
}

/**
 * Several methods advancing together: their asks of one round become one ask to every site, so that a path, its
 * cross-validation or a set of refits costs about as many rounds as one fit. Also names the vectors that a site already
 * has (`diagonalAsk`, `startAsk`).
 */
export class Lockstep<E extends object = MethodEnd> {
  private readonly open = new Map<number, OpenProblem<E>>();
  private groups = new EvaluateGroups();
  readonly ends: E[] = [];

  /**
   * `firstNumber`: of the problems, on the wire; what a policy limits per fit it counts by it. `folds`: labels of the folds that triangular factors are asked by; empty where there are none.
   */
  constructor(
    problems: readonly LockstepProblem<E>[],
    private readonly siteCount: number,
    private readonly folds: readonly string[] = [],
    private readonly firstNumber = 0,
  ) {
    problems.forEach((problem, at) => {
      const memory = { diagonal: null, points: null };
      this.advance(firstNumber + at, problem, memory, problem.method.next());
    });
  }

  /** What the problems that have not ended ask next. */
  get asks(): readonly MethodAsk[] {
    return [...this.open.values()].map(({ ask }) => ask);
  }

  /** One round's work for every site, in roster order; `askNumber` is the number this ask will have. */
  works(askNumber: number): Work[][] {
    this.groups = new EvaluateGroups();
    for (const [number, { ask, problem, memory }] of this.open) {
      if (ask.kind === 'evaluate') this.groups.add(number, problem, ask);
      else if (ask.kind === 'proximal' && memory.diagonal?.vector !== ask.diagonal)
        memory.diagonal = { vector: ask.diagonal, ask: askNumber };
    }
    const factored = this.asks.some(({ kind }) => kind === 'factor');
    return Array.from({ length: this.siteCount }, (_, site) => {
      const problems = this.proximalProblems(site, askNumber);
      return [
        ...(problems.length > 0 ? [{ work: 'proximal' as const, problems }] : []),
        ...this.groups.works(site),
        ...(factored ? [{ work: 'factor' as const, folds: [...this.folds] }] : []),
      ];
    });
  }

  /** Gives every open method its part of the sites' answers. */
  receive(answers: readonly (readonly WorkAnswer[])[], askNumber: number): void {
    const evaluations = this.groups.split(answers.map((own) => own.filter(isEvaluate)));
    for (const [number, { problem, ask, memory }] of [...this.open]) {
      const part = this.partOf(number, ask, problem, answers, evaluations);
      if (part.kind === 'proximal') memory.points = { vectors: part.points, ask: askNumber };
      this.advance(number, problem, memory, problem.method.next(part));
    }
  }

  private proximalProblems(site: number, askNumber: number): ProximalProblem[] {
    return [...this.open].flatMap(([number, { ask, problem, memory }]) => {
      const i = problem.sites.indexOf(site);
      if (ask.kind !== 'proximal' || i < 0) return [];
      const start = ask.starts[i];
      return [
        {
          problem: number,
          part: problem.part,
          center: ask.centers[i],
          scale: ask.scales[i],
          diagonal: ask.diagonal,
          diagonalAsk: memory.diagonal?.ask ?? askNumber,
          start,
          startAsk: memory.points?.vectors[i] === start ? memory.points.ask : askNumber,
        },
      ];
    });
  }

  private advance(
    number: number,
    problem: LockstepProblem<E>,
    memory: Memory,
    step: IteratorResult<MethodAsk, E>,
  ): void {
    if (step.done) {
      this.ends[number - this.firstNumber] = step.value;
      this.open.delete(number);
    } else this.open.set(number, { problem, ask: step.value, memory });
  }

  private partOf(
    number: number,
    ask: MethodAsk,
    { part, sites }: Scope,
    answers: readonly (readonly WorkAnswer[])[],
    evaluations: ReturnType<EvaluateGroups['split']>,
  ): SiteAnswers {
    switch (ask.kind) {
      case 'evaluate':
        return { kind: 'evaluate', sites: given(evaluations.get(number), number) };
      case 'proximal': {
        const points = sites.map((site) => {
          const solved = answers[site].find(isProximal)?.problems.find(({ problem }) => problem === number);
          return given(solved, number).point;
        });
        return { kind: 'proximal', points };
      }
      case 'factor': {
        const wanted = [...this.folds.keys()].filter((k) => this.folds[k] !== part?.fold);
        const factors = sites.flatMap((site) => {
          const own = given(answers[site].find(isFactor), number).factors;
          return this.folds.length === 0 ? own : wanted.map((k) => own[k]);
        });
        return { kind: 'factor', factors };
      }
    }
  }
}

interface OpenProblem<E extends object> {
  readonly problem: LockstepProblem<E>;
  readonly ask: MethodAsk;
  readonly memory: Memory;
}

/** What the sites already hold of a problem, and the ask that brought it there. */
interface Memory {
  diagonal: { readonly vector: Float64Array; readonly ask: number } | null;
  points: { readonly vectors: readonly Float64Array[]; readonly ask: number } | null;
}

const isEvaluate = (answer: WorkAnswer): answer is EvaluateAnswer => answer.work === 'evaluate';
const isProximal = (answer: WorkAnswer): answer is ProximalAnswer => answer.work === 'proximal';
const isFactor = (answer: WorkAnswer): answer is FactorAnswer => answer.work === 'factor';

/** What must be there because it was asked and checked; its absence is a defect of the panel, not of a site. */
function given<T>(value: T | undefined, problem: number): T {
  if (value === undefined) throw new TypeError(`no answer for problem ${problem}`);
  return value;
}
