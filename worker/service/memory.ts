import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { ProximalProblem } from '../../protocol/messages/proximal.js';
import type { Ask } from '../../protocol/messages/round.js';
import type { FilledProblem, FilledWork } from '../custody/content.js';

type VectorKind = 'diagonal' | 'point';

/** A point may stand in for a few asks (a repeat, a stale answer); a diagonal seldom changes. */
const KEPT: Readonly<Record<VectorKind, number>> = { diagonal: 2, point: 4 };

/**
 * The vectors of one run that later asks may leave out: per problem the last few diagonals that came and points that
 * were answered, by ask number. Bounded; what is gone is asked for in full again (`memory-missing`).
 */
export class VectorMemory {
  /** Oldest use first. */
  readonly #vectors = new Map<string, Float64Array>();
  readonly #asks = new Map<string, number[]>();
  readonly #numbersMost: number;
  #numbers = 0;

  constructor(numbersMost: number) {
    this.#numbersMost = numbersMost;
  }

  remember(kind: VectorKind, problem: number, ask: number, vector: Float64Array): void {
    const slot = `${kind} ${problem}`;
    this.#drop(slot, ask);
    const asks = [...(this.#asks.get(slot) ?? []), ask].sort((a, b) => a - b);
    this.#asks.set(slot, asks);
    this.#vectors.set(`${slot} ${ask}`, vector);
    this.#numbers += vector.length;
    if (asks.length > KEPT[kind]) this.#drop(slot, asks[0]);
    for (const key of this.#vectors.keys()) {
      if (this.#numbers <= this.#numbersMost) break;
      const [word, number, from] = key.split(' ');
      this.#drop(`${word} ${number}`, Number(from));
    }
  }

  recall(kind: VectorKind, problem: number, ask: number): Float64Array | null {
    const key = `${kind} ${problem} ${ask}`;
    const vector = this.#vectors.get(key);
    if (vector === undefined) return null;
    this.#vectors.delete(key);
    this.#vectors.set(key, vector);
    return vector;
  }

  clear(): void {
    this.#vectors.clear();
    this.#asks.clear();
    this.#numbers = 0;
  }

  #drop(slot: string, ask: number): void {
    const key = `${slot} ${ask}`;
    const vector = this.#vectors.get(key);
    if (vector === undefined) return;
    this.#vectors.delete(key);
    this.#numbers -= vector.length;
    const asks = (this.#asks.get(slot) ?? []).filter((kept) => kept !== ask);
    if (asks.length > 0) this.#asks.set(slot, asks);
    else this.#asks.delete(slot);
  }
}

/** The ask's work with every left-out vector filled in, or `memory-missing`. */
export function fillWorks(ask: Ask, memory: VectorMemory): Checked<FilledWork[]> {
  const works: FilledWork[] = [];
  for (const work of ask.work) {
    if (work.work !== 'proximal') {
      works.push(work);
      continue;
    }
    const problems: FilledProblem[] = [];
    for (const problem of work.problems) {
      const filled = fillProblem(problem, memory);
      if (filled === null)
        return fail(
          'memory-missing',
          `Problem ${problem.problem} of ask ${ask.ask} leaves out a vector that this worker no longer has.`,
          { remedy: 'Ask again with the diagonal and the start in full.' },
        );
      problems.push(filled);
    }
    works.push({ work: 'proximal', problems });
  }
  return succeed(works);
}

function fillProblem(asked: ProximalProblem, memory: VectorMemory): FilledProblem | null {
  const { problem, part, center, scale } = asked;
  const diagonal = asked.diagonal ?? memory.recall('diagonal', problem, asked.diagonalAsk);
  const start = asked.start ?? memory.recall('point', problem, asked.startAsk);
  return diagonal === null || start === null ? null : { problem, part, center, scale, diagonal, start };
}

/**
 * Keeps what came with an ask. A vector sent in full stands for the earlier ask it names, too: that is how a worker
 * that was started again catches up.
 */
export function rememberAsked(ask: Ask, memory: VectorMemory): void {
  for (const work of ask.work) {
    if (work.work !== 'proximal') continue;
    for (const { problem, diagonal, diagonalAsk, start, startAsk } of work.problems) {
      if (diagonal !== null) {
        memory.remember('diagonal', problem, ask.ask, diagonal);
        if (diagonalAsk >= 1 && diagonalAsk < ask.ask)
          memory.remember('diagonal', problem, diagonalAsk, diagonal);
      }
      if (start !== null && startAsk >= 1 && startAsk < ask.ask)
        memory.remember('point', problem, startAsk, start);
    }
  }
}
