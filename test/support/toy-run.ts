import { NO_FITS } from '../../coordinator/run/documents.js';
import type { Member, Run, RunAsk, Shown } from '../../coordinator/run/run.js';
import { memberName } from '../../coordinator/run/run.js';
import type { Answer, Ask } from '../../protocol/messages/round.js';
import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { NO_REPORT } from './specifications.js';

/** The mean of one number per site by gradient steps: a run small enough to be checked by hand. */
export const TOY_ROUNDS = 3;

export const toySpecification = (sites: FitSpecification['sites']): FitSpecification => ({
  title: 'Mean pressure',
  sites,
  missing: 'refuse',
  response: { column: 'pressure_bar', positive: null },
  loss: { kind: 'squared' },
  offset: null,
  weights: null,
  intercept: 'shared',
  terms: [],
  penalties: [],
  choose: null,
  report: NO_REPORT,
  rounds: { tolerance: 1e-8, most: 300, rung: 'highest' },
  barrier: { deadlineMs: 1000, quorum: 'all', oldest: 0, patienceMs: 5000, missing: 'stop' },
});

export function* toyRun(specification: FitSpecification, digest: string, roster: readonly Member[]): Run {
  const scaling = {
    rowCountTotal: 10,
    kept: [],
    center: new Float64Array(),
    scale: new Float64Array(),
  };
  let z = 0;
  let shown: Shown | null = null;
  let refused: string | null = null;
  for (let round = 1; round <= TOY_ROUNDS && refused === null; round++) {
    const ask: RunAsk = {
      stage: 'solve',
      works: roster.map(() => [
        {
          work: 'evaluate',
          problem: 0,
          part: null,
          points: [{ point: Float64Array.of(z), want: 'gradient' }],
          ownFit: null,
          sketch: null,
        },
      ]),
      barrier: { waitFor: [...roster.keys()], quorum: roster.length },
      scaling,
      shown,
    };
    const { replies } = yield ask;
    let sum = 0;
    for (const [index, answer] of replies.entries()) {
      if (answer === null) throw new Error('a reply is not there');
      if ('code' in answer) refused = `${memberName(roster[index])} refused: ${answer.code}`;
      else if (answer[0].work === 'evaluate') sum += answer[0].points[0].gradient?.[0] ?? Number.NaN;
    }
    if (refused === null) z -= (0.7 * sum) / roster.length;
    shown = shownRound(round, z);
  }
  const outcome = refused === null ? 'solved' : 'refused';
  return {
    outcome,
    reason: refused,
    shown,
    result: {
      format: 1,
      outcome,
      reason: refused,
      title: specification.title,
      specification: digest,
      software: 'toy',
      sites: roster.map((member) => ({
        site: memberName(member),
        rowsUsed: null,
        rowsDropped: null,
        kernel: member.kernel,
      })),
      without: [],
      rowsTotal: null,
      rung: 'pooled',
      rungReason: null,
      tolerance: 1e-8,
      ...NO_FITS,
      notes: [String(z)],
      rounds: TOY_ROUNDS,
      numbersSent: [],
    },
  };
}

function shownRound(round: number, objective: number): Shown {
  return {
    kind: 'round',
    stage: 'solve',
    round,
    tolerance: 1e-8,
    fitsOpen: 1,
    fitsTotal: 1,
    standIns: [],
    progress: {
      rung: 'pooled',
      purpose: 'gradient',
      primalResidual: null,
      dualResidual: null,
      relativeGap: null,
      gapMeasured: false,
      objective,
    },
  };
}

const toySurvey: SurveyAnswer = {
  work: 'survey',
  rowsUsed: 10,
  rowsDropped: 0,
  columns: [],
  mean: new Float64Array(),
  centredSquares: new Float64Array(),
  response: { weightSum: 10, weightedSum: 5, exposureSum: 10, least: 0, most: 1, saturatedLoss: 0 },
  folds: [],
  allowance: { leave: [], curvatureMost: null, numbersMost: null, roundsMost: null },
  notes: [],
};

/** What a toy site with this mean answers. */
export function toyAnswer(ask: Ask, mean: number): Answer {
  return {
    kind: 'answer',
    run: ask.run,
    ask: ask.ask,
    work: ask.work.map((work) => {
      if (work.work === 'survey') return toySurvey;
      if (work.work !== 'evaluate') throw new Error(`a toy site has no answer to ${work.work}`);
      const points = work.points.map(({ point }) => ({
        value: 0,
        gradient: Float64Array.of(point[0] - mean),
        diagonal: null,
        curvature: null,
      }));
      return { work: 'evaluate', problem: work.problem, points, ownFit: null, sketch: null };
    }),
  };
}
