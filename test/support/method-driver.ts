import type { Method, MethodEnd } from '../../coordinator/consensus/method.js';
import { Lockstep } from '../../coordinator/run/lockstep.js';
import { numbersDown } from '../../coordinator/run/traffic.js';
import type { Checked, Failure } from '../../protocol/failure.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { LocalSolver } from '../../worker/local/local-solver.js';

/** Numbers one site sends (up) and receives (down), counted as the protocol counts them. */
export interface Traffic {
  readonly up: number;
  readonly down: number;
}

/** One site's answer to one work item, by the real local solver. */
export function answerLocally(work: Work, site: LocalSolver): WorkAnswer {
  switch (work.work) {
    case 'survey':
    case 'scores':
    case 'site-fit':
    case 'margins':
    case 'quality':
      throw new Error(`a method does not ask for ${work.work}`);
    case 'factor':
      return { work: 'factor', factors: [must(site.factor())] };
    case 'evaluate':
      return {
        work: 'evaluate',
        problem: work.problem,
        points: work.points.map(({ point, want }) => must(site.evaluate(point, want))),
        ownFit:
          work.ownFit === null
            ? null
            : must(site.ownFit(work.points[work.ownFit.at].point, work.ownFit.hold)),
        sketch:
          work.sketch === null
            ? null
            : must(
                site.sketch(work.points[work.sketch.at].point, work.sketch.directions, work.sketch.columns),
              ),
      };
    case 'joint': {
      const { problem, start, curvature, linear, l1, l2 } = work;
      return { work: 'joint', problem, ...must(site.joint(start, { curvature, linear }, l1, l2)) };
    }
    case 'proximal':
      return {
        work: 'proximal',
        problems: work.problems.map(({ problem, center, scale, diagonal, start }) => {
          if (diagonal === null || start === null) throw new Error('a full ask leaves nothing out');
          return { problem, ...must(site.proximal(center, scale, diagonal, start)) };
        }),
      };
  }
}

/** Drives methods in lock-step to their ends with real local solvers in this process: no link, no panel. */
export function driveMethods(
  methods: readonly Method[],
  sites: readonly LocalSolver[],
): { readonly ends: readonly MethodEnd[]; readonly rounds: number; readonly traffic: Traffic } {
  const everyone = [...sites.keys()];
  const problems = methods.map((method) => ({ method, part: null, sites: everyone }));
  const lockstep = new Lockstep(problems, sites.length);
  let up = 0;
  let down = 0;
  let rounds = 0;
  while (lockstep.asks.length > 0) {
    const askNumber = ++rounds;
    const works = lockstep.works(askNumber);
    const answers = works.map((own, i) => own.map((work) => answerLocally(work, sites[i])));
    down += works[0].reduce((sum, work) => sum + numbersDown(work, askNumber), 0);
    up += answers[0].reduce((sum, answer) => sum + numbersOfAnswer(answer), 0);
    lockstep.receive(answers, askNumber);
  }
  return { ends: lockstep.ends, rounds, traffic: { up, down } };
}

/** A site that could not answer: in a run it would refuse. */
export class SiteFailure extends Error {
  constructor(readonly failure: Failure) {
    super(`${failure.code}: ${failure.message}`);
  }
}

export function must<T>(checked: Checked<T>): T {
  if (!checked.ok) throw new SiteFailure(checked.failure);
  return checked.value;
}
