import { numbersOfAnswer } from '../../protocol/numbers.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification, LossForm } from '../../protocol/specification/types.js';
import { SOFTWARE } from '../../protocol/version.js';
import type { MethodEnd } from '../consensus/method.js';
import { type AttemptBefore, goingOnWithout } from './going-on-without.js';
import type { FitDocument, ResultDocument } from './result.js';
import { type Member, memberName, type Run, type RunEnd, type RunOutcome, type Shown } from './run.js';
import { chooseRung, type RungChoice } from './rung.js';
import { type Frame, lambdaOf, originalScale, scale } from './scale.js';
import { type Solved, solve } from './solve.js';
import { solveLate, waitsForAll } from './solve-late.js';
import { lessSpent } from './spending.js';
import { type PooledSurvey, type Stop, survey } from './survey.js';

/**
 * One run, stage by stage: survey → scale → solve → report. The nth ask it yields has number n, from 1. The roster's
 * order is the order of every sum. Members given up on for good, where the specification allows that, are left out and
 * the stages begin again without them.
 */
export function* fit(specification: FitSpecification, digest: string, roster: readonly Member[]): Run {
  const about = { specification, digest };
  return yield* goingOnWithout(specification, roster, {
    begin: (present, before, without) => attempt({ ...about, roster: present, without }, before),
    tooFew: (present, without, reason) =>
      stopped({ ...about, roster: present, without }, { outcome: 'site-missing', reason }),
  });
}

function* attempt(about: About, before: AttemptBefore): Run {
  const { specification, roster } = about;
  const pooled = yield* survey(specification, roster, before.shown);
  if ('outcome' in pooled) return stopped(about, pooled);
  const surveyed = lessSpent(pooled, roster, before.spent);

  const columns = designColumns(specification);
  const frame = scale(specification, columns, surveyed);
  if (frame.p === 0)
    return stopped(
      about,
      { outcome: 'refused', reason: 'no column has any spread: nothing to fit.' },
      surveyed,
    );

  const choice = chooseRung(specification, surveyed, roster, frame.p);
  if ('outcome' in choice) return stopped(about, choice, surveyed);

  const stage = waitsForAll(specification, choice) ? solve : solveLate;
  const solved = yield* stage(
    specification,
    roster,
    surveyed,
    frame,
    choice,
    shownSurvey(surveyed, frame, choice),
    { asks: before.asks + 1, rounds: before.rounds },
  );
  if ('outcome' in solved) return stopped(about, solved, surveyed);

  return ended(about, surveyed, frame, choice, solved);
}

interface About {
  readonly specification: FitSpecification;
  readonly digest: string;
  readonly roster: readonly Member[];
  /** Whom the run went on without. */
  readonly without: ResultDocument['without'];
}

function shownSurvey(surveyed: PooledSurvey, frame: Frame, choice: RungChoice): Shown {
  return {
    kind: 'survey',
    rowsTotal: surveyed.rowsTotal,
    coefficients: frame.p,
    rung: choice.rung,
    rungReason: choice.reason,
    sites: surveyed.sites,
    notes: notesOf(surveyed, frame),
  };
}

function notesOf(surveyed: PooledSurvey, frame: Frame): string[] {
  const dropped = frame.dropped.map((name) => `${name} has no spread at any site: it gets no coefficient`);
  return [...surveyed.notes, ...dropped];
}

/** A run that ended before any fit was made. */
export function stopped(
  { specification, digest, roster, without }: About,
  stop: Omit<Stop, 'outcome'> & { readonly outcome: RunOutcome },
  surveyed: PooledSurvey | null = null,
): RunEnd {
  const result: ResultDocument = {
    format: 1,
    outcome: stop.outcome,
    reason: stop.reason,
    title: specification.title,
    specification: digest,
    software: SOFTWARE,
    sites: siteRows(roster, surveyed),
    without,
    rowsTotal: surveyed?.rowsTotal ?? null,
    rung: null,
    rungReason: null,
    tolerance: specification.rounds.tolerance,
    fits: [],
    notes: surveyed?.notes ?? [],
    rounds: 0,
    numbersSent: roster.map((member, i) => ({
      site: memberName(member),
      up: surveyed === null ? 0 : numbersOfAnswer(surveyed.answers[i]),
      down: 0,
    })),
  };
  return { outcome: stop.outcome, reason: stop.reason, shown: null, result };
}

function ended(
  about: About,
  surveyed: PooledSurvey,
  frame: Frame,
  choice: RungChoice,
  solved: Solved,
): RunEnd {
  const { specification, digest, roster, without } = about;
  const fits = solved.ends.map((end, number) => fitDocument(specification, surveyed, frame, end, number));
  const unsolved = fits.find((one) => one.outcome !== 'solved');
  const outcome = unsolved?.outcome ?? 'solved';
  const reason = unsolved?.reason ?? null;
  const result: ResultDocument = {
    format: 1,
    outcome,
    reason,
    title: specification.title,
    specification: digest,
    software: SOFTWARE,
    sites: siteRows(roster, surveyed),
    without,
    rowsTotal: surveyed.rowsTotal,
    rung: choice.rung,
    rungReason: choice.reason,
    tolerance: specification.rounds.tolerance,
    fits,
    notes: notesOf(surveyed, frame),
    rounds: solved.rounds,
    numbersSent: roster.map((member, i) => ({
      site: memberName(member),
      up: solved.up[i] + numbersOfAnswer(surveyed.answers[i]),
      down: solved.down[i],
    })),
  };
  return { outcome, reason, shown: solved.shown, result };
}

function siteRows(roster: readonly Member[], surveyed: PooledSurvey | null): ResultDocument['sites'] {
  return roster.map((member, i) => ({
    site: memberName(member),
    rowsUsed: surveyed?.sites[i].rowsUsed ?? null,
    rowsDropped: surveyed?.sites[i].rowsDropped ?? null,
    kernel: member.kernel,
  }));
}

function fitDocument(
  specification: FitSpecification,
  surveyed: PooledSurvey,
  frame: Frame,
  end: MethodEnd,
  number: number,
): FitDocument {
  return {
    lambda: lambdaOf(specification, number),
    outcome: end.outcome,
    reason: reasonInWords(end, frame, specification.loss),
    ...originalScale(frame, end.z),
    dropped: frame.dropped,
    objective: end.loss + end.penalty,
    loss: end.loss,
    penalty: end.penalty,
    deviance: 2 * (surveyed.rowsTotal * end.loss - surveyed.response.saturatedLoss),
    certificate: end.certificate,
    rounds: end.rounds,
    rung: end.rung,
  };
}

/** The method's reason with the names of the coefficients it is about. */
function reasonInWords(end: MethodEnd, frame: Frame, loss: LossForm): string | null {
  const first = frame.intercept ? 1 : 0;
  const names = end.columnsAtFault
    .map((j) => (j < first ? 'the intercept' : frame.kept[j - first].name))
    .join(', ');
  switch (end.reason) {
    case 'rank-deficient':
      return loss.kind === 'huber'
        ? `no unique optimum: without a penalty, over the rows within the threshold, ${names} can be written as a combination of the columns before it. Raise the threshold, leave it out, or add a ridge penalty. [rank-deficient]`
        : `no unique optimum: without a penalty, ${names} can be written as a combination of the columns before it. Leave it out, or add a ridge penalty. [rank-deficient]`;
    case 'separable':
      return `no optimum: the loss goes on falling as ${names} runs off to infinity (classes separated, or a level without events). Add a ridge penalty, or leave the term out. [separable]`;
    case null:
      return end.outcome === 'round-limit'
        ? `the gap was still above the tolerance after ${end.rounds} rounds. Raise \`rounds.most\` or the tolerance. [round-limit]`
        : null;
    default:
      return `${end.reason} [${end.outcome}]`;
  }
}
