import type { EvaluateAnswer } from '../../protocol/messages/evaluate.js';
import type { FactorAnswer } from '../../protocol/messages/factor.js';
import type { ProximalAnswer } from '../../protocol/messages/proximal.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Method, MethodAsk, MethodEnd, SiteAnswers } from '../consensus/method.js';

/**
 * Several methods advancing together: their asks of one round become one ask to every site, so that a list of λ costs
 * about as many rounds as one fit. Also names the vectors that a site already has (`diagonalAsk`, `startAsk`).
 */
export class Lockstep {
  private readonly open = new Map<number, { readonly method: Method; ask: MethodAsk; memory: Memory }>();
  readonly ends: MethodEnd[] = [];

  constructor(
    methods: readonly Method[],
    private readonly siteCount: number,
  ) {
    methods.forEach((method, problem) => {
      this.advance(problem, method, { diagonal: null, points: null }, method.next());
    });
  }

  /** Problems that have not ended, and what they ask next. */
  get asks(): readonly MethodAsk[] {
    return [...this.open.values()].map(({ ask }) => ask);
  }

  /** One round's work for every site, in roster order; `askNumber` is the number this ask will have. */
  works(askNumber: number): Work[][] {
    const entries = [...this.open.entries()];
    for (const [, entry] of entries) {
      const { ask, memory } = entry;
      if (ask.kind === 'proximal' && memory.diagonal?.vector !== ask.diagonal)
        memory.diagonal = { vector: ask.diagonal, ask: askNumber };
    }
    return Array.from({ length: this.siteCount }, (_, i) => {
      const works: Work[] = [];
      const problems = entries.flatMap(([problem, { ask, memory }]) => {
        if (ask.kind !== 'proximal') return [];
        const start = ask.starts[i];
        const known = memory.points?.vectors[i] === start ? memory.points.ask : askNumber;
        return [
          {
            problem,
            center: ask.centers[i],
            scale: ask.scales[i],
            diagonal: ask.diagonal,
            diagonalAsk: memory.diagonal?.ask ?? askNumber,
            start,
            startAsk: known,
          },
        ];
      });
      if (problems.length > 0) works.push({ work: 'proximal', problems });
      for (const [problem, { ask }] of entries)
        if (ask.kind === 'evaluate')
          works.push({
            work: 'evaluate',
            problem,
            points: [...ask.points],
            ownFit: ask.ownFit,
            sketch: ask.sketch,
          });
      if (entries.some(([, { ask }]) => ask.kind === 'factor')) works.push({ work: 'factor' });
      return works;
    });
  }

  /** Gives every open method its part of the sites' answers. */
  receive(answers: readonly (readonly WorkAnswer[])[], askNumber: number): void {
    for (const [problem, { method, ask, memory }] of [...this.open.entries()]) {
      const part = this.partOf(problem, ask, answers);
      if (part.kind === 'proximal') memory.points = { vectors: part.points, ask: askNumber };
      this.advance(problem, method, memory, method.next(part));
    }
  }

  private advance(
    problem: number,
    method: Method,
    memory: Memory,
    step: IteratorResult<MethodAsk, MethodEnd>,
  ): void {
    if (step.done) {
      this.ends[problem] = step.value;
      this.open.delete(problem);
    } else this.open.set(problem, { method, ask: step.value, memory });
  }

  private partOf(problem: number, ask: MethodAsk, answers: readonly (readonly WorkAnswer[])[]): SiteAnswers {
    const find = <T extends WorkAnswer>(is: (answer: WorkAnswer) => answer is T): T[] =>
      answers.map((site) => {
        const found = site.find(is);
        if (found === undefined) throw new TypeError(`no answer for problem ${problem}`);
        return found;
      });
    switch (ask.kind) {
      case 'proximal': {
        const sites = find((answer): answer is ProximalAnswer => answer.work === 'proximal');
        return {
          kind: 'proximal',
          points: sites.map((site) => {
            const own = site.problems.find((solved) => solved.problem === problem);
            if (own === undefined) throw new TypeError(`no proximal point for problem ${problem}`);
            return own.point;
          }),
        };
      }
      case 'evaluate': {
        const is = (answer: WorkAnswer): answer is EvaluateAnswer =>
          answer.work === 'evaluate' && answer.problem === problem;
        return { kind: 'evaluate', sites: find(is) };
      }
      case 'factor': {
        const sites = find((answer): answer is FactorAnswer => answer.work === 'factor');
        return { kind: 'factor', factors: sites.map((site) => site.factor) };
      }
    }
  }
}

/** What the sites already hold of a problem, and the ask that brought it there. */
interface Memory {
  diagonal: { readonly vector: Float64Array; readonly ask: number } | null;
  points: { readonly vectors: readonly Float64Array[]; readonly ask: number } | null;
}
