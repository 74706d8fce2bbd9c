import type { Work } from '../../protocol/messages/round.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { answerLocally } from '../support/method-driver.js';
import { makeHardProblem } from './hard-problem.js';
import { benchLoss } from './measure.js';
import { cpuMs } from './results-file.js';

export interface WorkerTime {
  readonly name: string;
  readonly rows: number;
  readonly p: number;
  readonly work: string;
  readonly cpuMs: number;
}

const SIZES = [
  [2000, 10],
  [20_000, 10],
  [2000, 100],
  [20_000, 100],
] as const;

/** What a site's answer takes, by its rows and columns: a logistic loss, one thread. The quickest of `repeats`. */
export function workerTimes(repeats: number): WorkerTime[] {
  return SIZES.flatMap(([rows, columns]) => {
    const { p, shards, start } = makeHardProblem('scale', { loss: 'logistic', rows, columns, sites: 1 });
    const site = localSolver(shards[0], benchLoss('logistic'));
    const diagonal = new Float64Array(p).fill(0.25);
    const works: Work[] = [
      evaluateOf(start, 'gradient'),
      evaluateOf(start, 'curvature'),
      {
        work: 'proximal',
        problems: [
          {
            problem: 0,
            part: null,
            center: start,
            scale: 1,
            diagonal,
            diagonalAsk: 1,
            start,
            startAsk: 1,
          },
        ],
      },
    ];
    return works.map((work): WorkerTime => {
      const what = work.work === 'evaluate' ? work.points[0].want : work.work;
      let least = Number.POSITIVE_INFINITY;
      for (let repeat = 0; repeat < repeats; repeat++) {
        const from = cpuMs();
        answerLocally(work, site);
        least = Math.min(least, cpuMs() - from);
      }
      return { name: `a site's ${what}, n = ${rows}, p = ${p}`, rows, p, work: what, cpuMs: least };
    });
  });
}

const evaluateOf = (point: Float64Array, want: 'gradient' | 'curvature'): Work => ({
  work: 'evaluate',
  problem: 0,
  part: null,
  points: [{ point, want }],
  ownFit: null,
  sketch: null,
});
