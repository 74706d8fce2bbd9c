import type { Work, WorkAnswer } from '../../protocol/messages/round.js';

/**
 * What one connection has received and answered in one run, as far as later asks may leave it out: per proximal
 * problem the latest diagonal sent (named by its `diagonalAsk`) and the latest ask answered. Bounded by the number of
 * problems of the run.
 */
export interface ConnectionMemory {
  readonly diagonals: ReadonlyMap<number, number>;
  readonly answered: ReadonlyMap<number, number>;
}

export const EMPTY_MEMORY: ConnectionMemory = { diagonals: new Map(), answered: new Map() };

/** The full works of an ask without the diagonals and starts that this connection has. */
export function slimWorks(works: readonly Work[], memory: ConnectionMemory): Work[] {
  return works.map((work) => {
    if (work.work !== 'proximal') return work;
    const problems = work.problems.map((problem) => ({
      ...problem,
      diagonal: memory.diagonals.get(problem.problem) === problem.diagonalAsk ? null : problem.diagonal,
      start: memory.answered.get(problem.problem) === problem.startAsk ? null : problem.start,
    }));
    return { work: 'proximal', problems };
  });
}

/** After `works` went out on the connection. */
export function rememberSent(memory: ConnectionMemory, works: readonly Work[]): ConnectionMemory {
  const sent = works.flatMap((work) => (work.work === 'proximal' ? work.problems : []));
  const news = sent.filter(({ diagonal }) => diagonal !== null);
  if (news.length === 0) return memory;
  const diagonals = new Map(memory.diagonals);
  for (const { problem, diagonalAsk } of news) diagonals.set(problem, diagonalAsk);
  return { ...memory, diagonals };
}

/** After the connection answered ask number `ask`. */
export function rememberAnswered(
  memory: ConnectionMemory,
  ask: number,
  answers: readonly WorkAnswer[],
): ConnectionMemory {
  const points = answers.flatMap((answer) => (answer.work === 'proximal' ? answer.problems : []));
  if (points.length === 0) return memory;
  const answered = new Map(memory.answered);
  for (const { problem } of points) answered.set(problem, ask);
  return { ...memory, answered };
}
