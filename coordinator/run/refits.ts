import { mergeFactors } from '../../numerics/triangular-factor.js';
import { sumOf } from '../../numerics/vector.js';
import { chordRefit } from '../consensus/chord-refit.js';
import { curvatureRung } from '../consensus/curvature-rung.js';
import type { MethodEnd } from '../consensus/method.js';
import { solvePooled } from '../consensus/pooled-rung.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import type { Description } from './description.js';
import type { LockstepProblem } from './lockstep.js';
import { wholeFrame } from './part-frames.js';
import { consensusProblem, type Grounds } from './problems.js';
import type { Rounds } from './rounds.js';
import type { Batch, RunAsk } from './run.js';
import { advance } from './solve.js';
import type { Stop } from './survey.js';

/** A change to the fit: coefficients held at values (solver columns), members left out. */
export interface Refit {
  readonly held: readonly { readonly column: number; readonly value: number }[];
  /** Members that take part, by index. */
  readonly members: readonly number[];
}

/**
 * The fit again under each change, from where it stands: exactly from the triangular factors where there are any, on the
 * curvature rung with measured curvature, else by values and gradients alone; all together in lock-step. The ends'
 * values are per row of all rows.
 */
export function* refitAll(
  grounds: Grounds,
  rounds: Rounds,
  description: Description,
  refits: readonly Refit[],
): Generator<RunAsk, MethodEnd[] | Stop, Batch> {
  const problems = refits.map((refit) => refitProblem(grounds, description, refit));
  const { first } = description;
  if (first?.kind === 'factor') {
    const each = first.factors.length / grounds.roster.length;
    return problems.map((problem, k) => {
      const own = refits[k].members.flatMap((i) => first.factors.slice(i * each, (i + 1) * each));
      return solvePooled(problem, mergeFactors(own, problem.p + 1));
    });
  }
  const methods = problems.map((problem, k): LockstepProblem => {
    const method =
      grounds.choice.rung === 'curvature'
        ? curvatureRung(problem)
        : chordRefit(problem, curvatureOf(description, refits[k]));
    return { method, part: null, sites: refits[k].members };
  });
  return yield* advance(grounds, rounds, methods, 'describe', rounds.newProblems(methods.length));
}

/** Curvature of the members that take part, at the fit. */
function curvatureOf({ members, curvature }: Description, refit: Refit): Float64Array {
  if (members !== null && refit.members.length < members.length)
    return sumOf(refit.members.map((i) => members[i].curvature));
  if (curvature === null) throw new TypeError('a refit without any curvature');
  return curvature;
}

/** The penalty weighs against the members' share of the rows, as it would in a fit of them alone. */
function refitProblem(grounds: Grounds, description: Description, refit: Refit): ConsensusProblem {
  const { specification, frame, survey } = grounds;
  const whole = wholeFrame(specification, frame, survey);
  const rows = refit.members.reduce((sum, i) => sum + survey.answers[i].rowsUsed, 0);
  const share = rows / survey.rowsTotal;
  const siteWeights = refit.members.map((i) => survey.answers[i].rowsUsed / rows);
  const problem = consensusProblem(grounds, { ...whole, share, siteWeights }, description.lambdas, 0);
  const start = Float64Array.from(description.end.z);
  for (const { column, value } of refit.held) {
    problem.penalty.lower[column] = problem.penalty.upper[column] = value;
    start[column] = value;
  }
  return { ...problem, start };
}

/** 2 N (F of the refit − F of the fit): the likelihood-ratio statistic of an unpenalised fit. */
export const twiceRise = (grounds: Grounds, { end }: Description, refit: MethodEnd): number =>
  2 * grounds.survey.rowsTotal * (refit.loss - end.loss);
