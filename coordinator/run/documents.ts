import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { FitSpecification, LossForm } from '../../protocol/specification/types.js';
import { SOFTWARE } from '../../protocol/version.js';
import type { MethodEnd } from '../consensus/method.js';
import type { Chosen } from './choose.js';
import type { Grounds } from './problems.js';
import type { FitDocument, ResultDocument } from './result.js';
import type { Rounds } from './rounds.js';
import { type Member, memberName, type RunEnd, type RunOutcome } from './run.js';
import { type Frame, originalScale } from './scale.js';
import type { Solved } from './solve.js';
import { movedOf, type StartFrom } from './start-from.js';
import type { PooledSurvey, Stop } from './survey.js';

/** Whose result it is. */
export interface About {
  readonly specification: FitSpecification;
  readonly digest: string;
  readonly roster: readonly Member[];
  /** What it was given to start from; null: nothing. */
  readonly startFrom: StartFrom | null;
  /** Whom the run went on without. */
  readonly without: ResultDocument['without'];
}

/** What the stages after the choice say about the fit that the run stands by. */
export type Described = Pick<ResultDocument, 'inference' | 'comparison' | 'fitQuality' | 'omitted'>;

export const NOT_DESCRIBED: Described = { inference: null, comparison: null, fitQuality: null, omitted: [] };

/** What a result says of its fits. */
type Fitted = Described & Pick<ResultDocument, 'fits' | 'chosen' | 'choice' | 'startedFrom' | 'moved'>;

export const NO_FITS: Fitted = {
  fits: [],
  chosen: null,
  choice: null,
  ...NOT_DESCRIBED,
  startedFrom: null,
  moved: null,
};

type Known = Pick<
  ResultDocument,
  'sites' | 'without' | 'rowsTotal' | 'rung' | 'rungReason' | 'notes' | 'rounds' | 'numbersSent'
>;

/** `result.json`: its fields in their order, from what is known of the sites and of the fits. */
export const resultOf = (
  { specification, digest }: Pick<About, 'specification' | 'digest'>,
  { outcome, reason }: Pick<ResultDocument, 'outcome' | 'reason'>,
  { sites, without, rowsTotal, rung, rungReason, notes, rounds, numbersSent }: Known,
  fitted: Fitted = NO_FITS,
): ResultDocument => ({
  format: 1,
  outcome,
  reason,
  title: specification.title,
  specification: digest,
  software: SOFTWARE,
  sites,
  without,
  rowsTotal,
  rung,
  rungReason,
  tolerance: specification.rounds.tolerance,
  ...fitted,
  notes,
  rounds,
  numbersSent,
});

/** A run that ended before any fit was made. */
export function stopped(
  about: About,
  stop: Omit<Stop, 'outcome'> & { readonly outcome: RunOutcome },
  surveyed: PooledSurvey | null = null,
): RunEnd {
  const { roster, without } = about;
  const result = resultOf(about, stop, {
    sites: siteRows(roster, surveyed),
    without,
    rowsTotal: surveyed?.rowsTotal ?? null,
    rung: null,
    rungReason: null,
    notes: surveyed?.notes ?? [],
    rounds: 0,
    numbersSent: roster.map((member, i) => ({
      site: memberName(member),
      up: surveyed === null ? 0 : numbersOfAnswer(surveyed.answers[i]),
      down: 0,
    })),
  });
  return { outcome: stop.outcome, reason: stop.reason, shown: null, result };
}

/** A run whose fits were made: `solved` where each of them is. */
export function ended(
  about: About,
  grounds: Grounds,
  rounds: Rounds,
  solved: Solved,
  chosen: Chosen,
  described: Described,
): RunEnd {
  const { roster, without } = about;
  const { survey, choice } = grounds;
  const fits = solved.ends.map((end, fit) => fitDocument(grounds, end, solved.lambdas[fit]));
  const unsolved = fits.find((one) => one.outcome !== 'solved');
  const outcome = unsolved?.outcome ?? 'solved';
  const reason = unsolved?.reason ?? null;
  const known = {
    sites: siteRows(roster, survey),
    without,
    rowsTotal: survey.rowsTotal,
    rung: choice.rung,
    rungReason: choice.reason,
    notes: [...notesOf(grounds), ...chosen.notes],
    rounds: rounds.count,
    numbersSent: roster.map((member, i) => ({
      site: memberName(member),
      up: rounds.up[i] + numbersOfAnswer(survey.answers[i]),
      down: rounds.down[i],
    })),
  };
  const fitted = { fits, chosen: chosen.fit, choice: chosen.document, ...described };
  const start = startOf(about, grounds, chosen.fit === null ? null : fits[chosen.fit], described);
  const result = resultOf(about, { outcome, reason }, known, { ...fitted, ...start });
  return { outcome, reason, shown: rounds.shown, result };
}

/** What the run was given to start from, and how far the fit that it stands by has moved since. */
function startOf(
  { startFrom }: About,
  { warm }: Grounds,
  fit: FitDocument | null,
  { inference }: Described,
): Pick<ResultDocument, 'startedFrom' | 'moved'> {
  if (startFrom === null) return { startedFrom: null, moved: null };
  const { run, coefficients } = startFrom;
  const used = warm !== null && warm.point !== null;
  return {
    startedFrom: { run, coefficients: Object.fromEntries(coefficients), used },
    moved: fit === null ? null : movedOf(startFrom, fit, inference),
  };
}

/** Columns without a coefficient that have a note each; the fits name them all. */
const DROPPED_LISTED_MOST = 20;

export function notesOf({ survey: surveyed, frame, warm }: Grounds): string[] {
  const listed = frame.dropped.slice(0, DROPPED_LISTED_MOST);
  const dropped = listed.map((name) => `${name} has no spread at any site: it gets no coefficient`);
  const more = frame.dropped.length - listed.length;
  if (more > 0) dropped.push(`${more} more columns have no spread at any site: they get no coefficient`);
  return [...surveyed.notes, ...dropped, ...(warm === null ? [] : [warm.note])];
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
  { specification, survey, frame }: Grounds,
  end: MethodEnd,
  lambdas: readonly number[],
): FitDocument {
  return {
    lambda: lambdas.length === 0 ? null : lambdas.length === 1 ? lambdas[0] : lambdas,
    outcome: end.outcome,
    reason: reasonInWords(end, frame, specification.loss),
    ...originalScale(frame, end.z),
    dropped: frame.dropped,
    objective: end.loss + end.penalty,
    loss: end.loss,
    penalty: end.penalty,
    deviance: 2 * (survey.rowsTotal * end.loss - survey.response.saturatedLoss),
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
