import type { Work } from '../../protocol/messages/round.js';
import { numbersOfWork } from '../../protocol/numbers.js';

/**
 * Numbers that ask number `askNumber` brings to a site which still has what came with earlier asks: the traffic of an
 * undisturbed run, whatever had to be sent again after a lost link.
 */
export function numbersDown(work: Work, askNumber: number): number {
  if (work.work !== 'proximal') return numbersOfWork(work);
  return numbersOfWork({
    ...work,
    problems: work.problems.map((problem) => ({
      ...problem,
      diagonal: problem.diagonalAsk === askNumber ? problem.diagonal : null,
      start: problem.startAsk === askNumber ? problem.start : null,
    })),
  });
}
