import { clipToBounds } from '../../numerics/penalty.js';
import { packedLength } from '../../protocol/messages/vector.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { curvatureRung } from '../consensus/curvature-rung.js';
import type { Method } from '../consensus/method.js';
import { pooledRung } from '../consensus/pooled-rung.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import { proximalRung } from '../consensus/proximal-rung.js';
import { sketchedRung } from '../consensus/sketched-rung.js';
import type { PartFrame } from './part-frames.js';
import type { Member } from './run.js';
import type { RungChoice } from './rung.js';
import { type Frame, penaltyOf } from './scale.js';
import type { WarmStart } from './start-from.js';
import type { PooledSurvey } from './survey.js';

/**
 * Numbers in one curvature matrix up to which it is asked at every trial point: above it (400 kB, some 315 columns) the
 * bytes cost more than the round they may save. By size, not by the measured speed of the links: the weather of a
 * network must not change a bit of the result.
 */
const TRIAL_NUMBERS_MOST = 50_000;

/** All that the stages after the survey know. */
export interface Grounds {
  readonly specification: FitSpecification;
  readonly roster: readonly Member[];
  readonly survey: PooledSurvey;
  readonly frame: Frame;
  readonly choice: RungChoice;
  /** Where the run starts instead of the intercept-only fit; null: it does not. */
  readonly warm: WarmStart | null;
}

/** The consensus problem of some rows under these λ; `seed` sets its random directions apart from another's. */
export function consensusProblem(
  { specification, survey, frame, choice, warm }: Grounds,
  rows: PartFrame,
  lambdas: readonly number[],
  seed: number,
): ConsensusProblem {
  const penalty = penaltyOf(specification.penalties, lambdas, specification, frame, rows.sd);
  const first = frame.intercept ? 1 : 0;
  for (let j = 0; j < frame.p; j++) {
    penalty.l1[j] *= rows.share;
    penalty.l2[j] *= rows.share;
    // a column without spread among these rows: it has no coefficient there
    if (j >= first && !(rows.sd[j - first] > 0)) penalty.lower[j] = penalty.upper[j] = 0;
  }
  return {
    p: frame.p,
    siteWeights: rows.siteWeights,
    penalty,
    start: warm === null || warm.point === null ? rows.start : clipToBounds(penalty, warm.point),
    tolerance: specification.rounds.tolerance,
    roundsMost: specification.rounds.most,
    quadratic: specification.loss.kind === 'squared',
    separatedBelow: separatedBelow(specification, survey),
    curvatureMayVanish: specification.loss.kind === 'huber',
    curvatureMost: choice.curvatureMost,
    trialMatrices: packedLength(frame.p) <= TRIAL_NUMBERS_MOST ? 'all' : 'first',
    sketch: choice.sketch,
    seed,
  };
}

/** See `ConsensusProblem`: rows of a 0/1 response, each counted once. */
function separatedBelow({ loss, weights, offset }: FitSpecification, survey: PooledSurvey): number | null {
  return loss.kind === 'logistic' && weights === null && offset === null ? Math.LN2 / survey.rowsTotal : null;
}

export function methodOn(rung: RungChoice['rung'], problem: ConsensusProblem): Method {
  switch (rung) {
    case 'pooled':
      return pooledRung(problem);
    case 'curvature':
      return curvatureRung(problem);
    case 'sketched':
      return sketchedRung(problem);
    case 'proximal':
      return proximalRung(problem);
  }
}
