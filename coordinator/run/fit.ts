import { designColumns } from '../../protocol/specification/design-columns.js';
import { fitCount } from '../../protocol/specification/fit-count.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { choose } from './choose.js';
import { describe } from './describe.js';
import { type About, ended, notesOf, stopped } from './documents.js';
import { type AttemptBefore, goingOnWithout } from './going-on-without.js';
import type { Grounds } from './problems.js';
import { isStop, Rounds } from './rounds.js';
import type { Member, Run, Shown } from './run.js';
import { chooseRung } from './rung.js';
import { scale, startOn } from './scale.js';
import { solve } from './solve.js';
import { solveLate, waitsForAll } from './solve-late.js';
import { lessSpent } from './spending.js';
import { type StartFrom, warmStartOf } from './start-from.js';
import { survey } from './survey.js';

/**
 * One run, stage by stage: survey → scale → solve → choose → describe → report. The nth ask it yields has number n,
 * from 1. The roster's order is the order of every sum. Members given up on for good, where the specification allows
 * that, are left out and the stages begin again without them. `startFrom`: coefficients of an earlier run.
 */
export function* fit(
  specification: FitSpecification,
  digest: string,
  roster: readonly Member[],
  startFrom: StartFrom | null = null,
): Run {
  const about = { specification, digest, startFrom };
  return yield* goingOnWithout(specification, roster, {
    begin: (present, before, without) => attempt({ ...about, roster: present, without }, before),
    tooFew: (present, without, reason) =>
      stopped({ ...about, roster: present, without }, { outcome: 'site-missing', reason }),
  });
}

function* attempt(about: About, before: AttemptBefore): Run {
  const { specification, roster } = about;
  const pooled = yield* survey(specification, roster, before.shown);
  if (isStop(pooled)) return stopped(about, pooled);
  const surveyed = lessSpent(pooled, roster, before.spent, fitCount(specification));

  const frame = scale(specification, designColumns(specification), surveyed);
  if (frame.p === 0) {
    const reason =
      'no column of any term has any spread over all sites: there is nothing to fit. Name other columns in `terms`.';
    return stopped(about, { outcome: 'refused', reason }, surveyed);
  }

  const choice = chooseRung(specification, surveyed, roster, frame.p);
  if (isStop(choice)) return stopped(about, choice, surveyed);

  const { startFrom } = about;
  const nullStart = startOn(specification, frame, surveyed.response);
  const warm = startFrom === null ? null : warmStartOf(startFrom, specification, frame, choice, nullStart);
  const grounds: Grounds = { specification, roster, survey: surveyed, frame, choice, warm };
  const asks = { asks: before.asks + 1, rounds: before.rounds };
  const rounds = new Rounds(roster, frame.scaling, asks, shownSurvey(grounds));
  const solved = yield* waitsForAll(grounds) ? solve(grounds, rounds) : solveLate(grounds, rounds);
  if (isStop(solved)) return stopped(about, solved, surveyed);

  const chosen = yield* choose(grounds, rounds, solved);
  if (isStop(chosen)) return stopped(about, chosen, surveyed);

  const described = yield* describe(grounds, rounds, solved, chosen);
  if (isStop(described)) return stopped(about, described, surveyed);

  return ended(about, grounds, rounds, solved, chosen, described);
}

function shownSurvey(grounds: Grounds): Shown {
  const { survey: surveyed, frame, choice } = grounds;
  return {
    kind: 'survey',
    rowsTotal: surveyed.rowsTotal,
    coefficients: frame.p,
    rung: choice.rung,
    rungReason: choice.reason,
    sites: surveyed.sites,
    notes: notesOf(grounds),
  };
}
