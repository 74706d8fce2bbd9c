import { NO_FITS } from '../../coordinator/run/documents.js';
import { type AttemptBefore, goingOnWithout, type Without } from '../../coordinator/run/going-on-without.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import {
  askAll,
  everyone,
  type Member,
  memberName,
  type Run,
  type RunAsk,
  type RunOutcome,
  type Shown,
} from '../../coordinator/run/run.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { toySpecification } from './toy-run.js';

/** Rounds of the toy run below, the last of which hears everyone. */
export const LATE_ROUNDS = 6;

export const lateSpecification = (sites: FitSpecification['sites']): FitSpecification => ({
  ...toySpecification(sites),
  barrier: { deadlineMs: 1000, quorum: 2, oldest: 40, patienceMs: 5000, missing: 'go-without' },
});

/**
 * The mean of one number per site by gradient steps in which older gradients stand in: two replies end a round, who owes
 * one is not asked again, and the last round hears everyone. Its notes hold every number of the way, the ages too.
 */
export function* toyLateRun(specification: FitSpecification, digest: string, roster: readonly Member[]): Run {
  return yield* goingOnWithout(specification, roster, {
    begin: (present, before, without) => attempt(specification, digest, present, before, without),
    tooFew: (present, without, reason) => ({
      ...endOf(specification, digest, present, without, 'site-missing', reason, [], 0),
      shown: null,
    }),
  });
}

const SCALING = { rowCountTotal: 10, kept: [], center: new Float64Array(), scale: new Float64Array() };

function* attempt(
  specification: FitSpecification,
  digest: string,
  roster: readonly Member[],
  before: AttemptBefore,
  without: Without,
): Run {
  const count = roster.length;
  const survey = roster.map(() => [{ work: 'survey' as const }]);
  const { agesMs: first } = yield* askAll({
    stage: 'survey',
    works: survey,
    scaling: null,
    shown: before.shown,
  });
  const way: number[][] = [[...first]];
  const heard: (number | null)[] = roster.map(() => null);
  const heardIn: (number | null)[] = roster.map(() => null);
  const owes = roster.map(() => false);
  let z = 0;
  let shown: Shown = shownSurvey(roster);
  for (let round = 1; round <= LATE_ROUNDS; round++) {
    const last = round === LATE_ROUNDS;
    const works: RunAsk['works'] = roster.map((_, i) =>
      owes[i] && !last
        ? null
        : [
            {
              work: 'evaluate',
              problem: 0,
              part: null,
              points: [{ point: Float64Array.of(z), want: 'gradient' }],
              ownFit: null,
              sketch: null,
            },
          ],
    );
    const asked = works.filter((own) => own !== null).length;
    const quorum = last || specification.barrier.quorum === 'all' ? asked : Math.min(2, asked);
    const { replies, agesMs } = yield {
      stage: 'solve',
      works,
      barrier: { waitFor: last ? everyone(count) : [], quorum },
      scaling: SCALING,
      shown,
    };
    for (const [i, reply] of replies.entries()) {
      owes[i] = reply === null;
      if (reply === null || 'code' in reply || reply[0].work !== 'evaluate') continue;
      heard[i] = reply[0].points[0].gradient?.[0] ?? null;
      heardIn[i] = round;
    }
    const known = heard.flatMap((gradient) => gradient ?? []);
    z -= (0.7 * known.reduce((sum, gradient) => sum + gradient, 0)) / Math.max(1, known.length);
    way.push([z, ...agesMs]);
    const standIns = roster.flatMap((member, i) =>
      owes[i] ? [{ site: memberName(member), round: heardIn[i] }] : [],
    );
    shown = shownRound(before.rounds + round, z, standIns);
  }
  const end = endOf(specification, digest, roster, without, 'solved', null, way, before.rounds + LATE_ROUNDS);
  return { ...end, shown };
}

function shownSurvey(roster: readonly Member[]): Shown {
  return {
    kind: 'survey',
    rowsTotal: 10 * roster.length,
    coefficients: 1,
    rung: 'proximal',
    rungReason: 'it is a toy',
    sites: roster.map((member) => ({ site: memberName(member), rowsUsed: 10, rowsDropped: 0 })),
    notes: [],
  };
}

function shownRound(
  round: number,
  objective: number,
  standIns: Extract<Shown, { kind: 'round' }>['standIns'],
): Shown {
  return {
    kind: 'round',
    stage: 'solve',
    round,
    tolerance: 1e-8,
    fitsOpen: 1,
    fitsTotal: 1,
    standIns,
    progress: {
      rung: 'proximal',
      purpose: 'gradient',
      primalResidual: null,
      dualResidual: null,
      relativeGap: null,
      gapMeasured: false,
      objective,
    },
  };
}

function endOf(
  specification: FitSpecification,
  digest: string,
  roster: readonly Member[],
  without: Without,
  outcome: RunOutcome,
  reason: string | null,
  way: readonly (readonly number[])[],
  rounds: number,
) {
  const result: ResultDocument = {
    format: 1,
    outcome,
    reason,
    title: specification.title,
    specification: digest,
    software: 'toy',
    sites: roster.map((member) => ({
      site: memberName(member),
      rowsUsed: 10,
      rowsDropped: 0,
      kernel: member.kernel,
    })),
    without,
    rowsTotal: 10 * roster.length,
    rung: 'proximal',
    rungReason: null,
    tolerance: 1e-8,
    ...NO_FITS,
    notes: way.map((numbers) => numbers.join(' ')),
    rounds,
    numbersSent: [],
  };
  return { outcome, reason, result };
}
