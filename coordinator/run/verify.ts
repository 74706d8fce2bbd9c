import { mergeFactors } from '../../numerics/triangular-factor.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { MethodEnd } from '../consensus/method.js';
import { solvePooled } from '../consensus/pooled-rung.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import type { AnswerBook } from './answer-book.js';
import { lambdaPath } from './lambda-path.js';
import { wholeFrame } from './part-frames.js';
import { consensusProblem, type Grounds } from './problems.js';
import type { FitDocument, ResultDocument } from './result.js';
import type { Member } from './run.js';
import { fitCount, lambdasOf, originalScale, scale, startOn } from './scale.js';
import { NO_SKETCH } from './sketch-budget.js';
import { startGradient } from './start-answers.js';
import { type StartFrom, warmStartOf } from './start-from.js';
import { survey } from './survey.js';
import {
  type Candidate,
  gradientCandidates,
  measuredCandidates,
  quadraticCandidates,
} from './verify-points.js';

/** What a fit of `result.json` was checked against. */
export interface VerifiedFit {
  /** Index into `fits`. */
  readonly fit: number;
  readonly lambda: FitDocument['lambda'];
  /**
   * `recomputed`: gap and coefficients come out of the answers at one point; `part`: what one point's answers hold does,
   * but not the gap, which rests on models learned in many rounds; `uncertified`: nothing to recompute.
   */
  readonly extent: 'recomputed' | 'part' | 'uncertified';
  readonly kind: 'measured' | 'sketched' | 'estimate' | 'duality-gap' | null;
  /** As recomputed; of `part`, as the run gave it. */
  readonly relativeGap: number | null;
  /** The ask with the answers that it was recomputed from, and how many members gave them. */
  readonly ask: number | null;
  readonly members: number;
  /**
   * `step`: the coefficients are one model step beyond the point of the answers; `point`: they are that point; `function`: squared
   * loss, whose answers anywhere are the whole function, and the coefficients its minimiser.
   */
  readonly at: 'step' | 'point' | 'function' | null;
  /** The gap measured anew where a later ask asked curvature at the coefficients themselves. */
  readonly atCoefficients: { readonly ask: number; readonly relativeGap: number } | null;
  /** What differs from `result.json`, a sentence each. */
  readonly differences: readonly string[];
}

/** Points tried for a fit, the nearest to its coefficients first. */
const CANDIDATES_MOST = 8;
const FIELDS = ['loss', 'penalty', 'objective'] as const;
const FIGURES = ['kind', 'gap', 'relativeGap', 'kkt'] as const;
const NAMES_MOST = 3;

/**
 * Checks every fit of a result against the answers themselves and not by the iteration: finds the answers of all members
 * at the certified point, sums them in roster order, and takes objective, least subgradient and decrement anew. Nothing
 * of the result is trusted: its coefficients only say which point to look at.
 */
export function verifyFits(
  specification: FitSpecification,
  roster: readonly Member[],
  startFrom: StartFrom | null,
  book: AnswerBook,
  result: Pick<ResultDocument, 'fits' | 'rung'>,
): VerifiedFit[] {
  const grounds = groundsOf(specification, roster, startFrom, book, result);
  if (grounds === null)
    return result.fits.map((fit, at) => unknown(fit, at, 'the survey cannot be pooled again'));
  const path = pathOf(grounds, book);
  const count = fitCount(specification);
  return result.fits.map((fit, at) => {
    if (at >= count) return unknown(fit, at, `the specification asks for ${count} fits only`);
    const lambdas = lambdasOf(specification, at, path);
    const problem = consensusProblem(
      grounds,
      wholeFrame(specification, grounds.frame, grounds.survey),
      lambdas,
      at,
    );
    const verified = verifyFit(grounds, problem, book, fit, at);
    const own = lambdas.length === 0 ? null : lambdas.length === 1 ? lambdas[0] : lambdas;
    const differs = JSON.stringify(own) !== JSON.stringify(fit.lambda);
    const what = `λ is ${JSON.stringify(fit.lambda)}; recomputed, it is ${JSON.stringify(own)}`;
    return differs ? { ...verified, differences: [what, ...verified.differences] } : verified;
  });
}

function groundsOf(
  specification: FitSpecification,
  roster: readonly Member[],
  startFrom: StartFrom | null,
  { present, surveys }: AnswerBook,
  { rung }: Pick<ResultDocument, 'rung'>,
): Grounds | null {
  const members = present.map((i) => roster[i]);
  if (members.length === 0 || surveys.length < members.length || rung === null) return null;
  const asked = survey(specification, members, null);
  asked.next();
  const replies = surveys.map((answer) => [answer]);
  const { done, value } = asked.next({ replies, agesMs: members.map(() => 0), gone: [] });
  if (!done || 'outcome' in value) return null;
  const frame = scale(specification, designColumns(specification), value);
  const choice = { rung, reason: '', curvatureMost: 0, sketch: NO_SKETCH };
  const nullStart = startOn(specification, frame, value.response);
  const warm = startFrom === null ? null : warmStartOf(startFrom, specification, frame, choice, nullStart);
  return { specification, roster: members, survey: value, frame, choice, warm };
}

/** The λ of a path from the gradient at the intercept-only fit; null without a path, or without that gradient. */
function pathOf(
  { specification, survey: surveyed, frame }: Grounds,
  book: AnswerBook,
): readonly number[] | null {
  if (specification.penalties.every(({ path }) => path === null)) return null;
  const whole = wholeFrame(specification, frame, surveyed);
  const factors = book.allFactors();
  const key = whole.start.join(',');
  const at = book.complete(({ gradient }) => gradient !== null).find(({ point }) => point.join(',') === key);
  if (factors === null && at === undefined) return null;
  const first =
    factors !== null
      ? ({ kind: 'factor', factors: factors.factors } as const)
      : {
          kind: 'evaluate' as const,
          sites: (at?.answers ?? []).map((own) => ({ points: [own], ownFit: null, sketch: null })),
        };
  return lambdaPath(specification, frame, startGradient(first, whole, frame.p));
}

function verifyFit(
  grounds: Grounds,
  problem: ConsensusProblem,
  book: AnswerBook,
  fit: FitDocument,
  at: number,
): VerifiedFit {
  const members = grounds.roster.length;
  const base = { fit: at, lambda: fit.lambda, members, atCoefficients: null };
  if (fit.certificate === null)
    return {
      ...base,
      extent: 'uncertified',
      kind: null,
      relativeGap: null,
      ask: null,
      at: null,
      differences: [],
    };
  const theta = solverScale(grounds, fit);
  const candidates = candidatesFor(grounds, problem, book, fit, theta);
  const compared = candidates.map((candidate) => ({ candidate, wrong: compare(grounds, fit, candidate) }));
  const [best] = compared.sort((a, b) => a.wrong.length - b.wrong.length);
  if (best === undefined || (best.wrong.length > 0 && fit.outcome !== 'solved')) {
    // an unsolved fit stands where it was left: its gap may be of another point than its coefficients
    const extent = fit.outcome === 'solved' ? 'recomputed' : 'uncertified';
    const missing = `no answers of all ${members} sites lead to its coefficients`;
    const differences = fit.outcome === 'solved' ? [missing] : [];
    return {
      ...base,
      extent,
      kind: fit.certificate.kind,
      relativeGap: null,
      ask: null,
      at: null,
      differences,
    };
  }
  const { candidate, wrong } = best;
  const { certificate, ask, extent } = candidate;
  return {
    ...base,
    extent,
    kind: fit.certificate.kind,
    relativeGap: certificate.relativeGap,
    ask,
    at: candidate.at,
    atCoefficients: candidate.at === 'step' ? measuredAt(problem, book, candidate) : null,
    differences: shortened(wrong),
  };
}

function candidatesFor(
  grounds: Grounds,
  problem: ConsensusProblem,
  book: AnswerBook,
  fit: FitDocument,
  theta: Float64Array,
): Candidate[] {
  if (fit.rung === 'pooled') return pooledCandidates(problem, book);
  const curved = book.complete(({ gradient, curvature }) => gradient !== null && curvature !== null);
  if (fit.certificate?.kind !== 'measured') {
    const plain = book.complete((own) => own.gradient !== null && own.curvature === null);
    const near = nearest(plain.length > 0 ? plain : curved, theta);
    const startKey = problem.start.join(',');
    const start = book.complete(() => true).find(({ point }) => point.join(',') === startKey);
    return near.flatMap((point) => gradientCandidates(problem, point, start ?? null, fit.certificate));
  }
  if (grounds.specification.loss.kind === 'squared')
    return curved.slice(0, CANDIDATES_MOST).flatMap((point) => quadraticCandidates(problem, point));
  return nearest(curved, theta).flatMap((point) => measuredCandidates(problem, point));
}

function pooledCandidates(problem: ConsensusProblem, book: AnswerBook): Candidate[] {
  const found = book.allFactors();
  if (found === null) return [];
  const end: MethodEnd = solvePooled(problem, mergeFactors(found.factors, problem.p + 1));
  const { z, loss, penalty, certificate } = end;
  return certificate === null
    ? []
    : [{ at: 'function', ask: found.ask, extent: 'recomputed', z, loss, penalty, certificate }];
}

/** The gap by curvature asked at the coefficients themselves; null where none was. */
function measuredAt(
  problem: ConsensusProblem,
  book: AnswerBook,
  { z, ask }: Candidate,
): VerifiedFit['atCoefficients'] {
  const key = z.join(',');
  const there = book
    .complete(({ gradient, curvature }) => gradient !== null && curvature !== null)
    .find(({ point }) => point.join(',') === key);
  if (there === undefined || there.ask === ask) return null;
  const own = measuredCandidates(problem, there).find(({ at }) => at === 'point');
  return own === undefined ? null : { ask: there.ask, relativeGap: own.certificate.relativeGap };
}

/** θ_j = b_j · scale_j, with the intercept on centred columns. A column that the result lacks counts as 0. */
function solverScale({ frame }: Grounds, { intercept, coefficients }: FitDocument): Float64Array {
  const first = frame.intercept ? 1 : 0;
  const theta = new Float64Array(frame.p);
  if (frame.intercept) theta[0] = intercept ?? 0;
  for (const [j, { name }] of frame.kept.entries()) {
    const value = coefficients[name] ?? 0;
    theta[first + j] = value * frame.scaling.scale[j];
    if (frame.intercept) theta[0] += value * frame.scaling.center[j];
  }
  return theta;
}

/** By a distance in which one wrong coefficient, however wrong, counts no more than another: it must not hide the point. */
function nearest<T extends { readonly point: Float64Array }>(points: readonly T[], theta: Float64Array): T[] {
  const distance = (point: Float64Array): number =>
    point.reduce((sum, value, j) => {
      const square = ((value - theta[j]) / 1e-3) ** 2;
      return sum + (Number.isFinite(square) ? square / (1 + square) : 1);
    }, 0);
  return points
    .map((point) => ({ point, far: distance(point.point) }))
    .sort((a, b) => a.far - b.far)
    .slice(0, CANDIDATES_MOST)
    .map(({ point }) => point);
}

/** Where the result's figures are not those of a candidate, to the bit. */
function compare({ frame }: Grounds, fit: FitDocument, candidate: Candidate): string[] {
  const { z, loss, penalty, certificate } = candidate;
  const { intercept, coefficients } = originalScale(frame, z);
  const objective = loss + penalty;
  const own = { loss, penalty, objective };
  const differing: string[] = [];
  const check = (field: string, stored: unknown, recomputed: unknown): void => {
    if (!Object.is(stored, recomputed))
      differing.push(`${field} is ${shown(stored)}; recomputed from the answers, it is ${shown(recomputed)}`);
  };
  check('intercept', fit.intercept, intercept);
  for (const name of new Set([...Object.keys(coefficients), ...Object.keys(fit.coefficients)]))
    check(`coefficients.${name}`, fit.coefficients[name], coefficients[name]);
  for (const field of FIELDS) check(field, fit[field], own[field]);
  for (const field of FIGURES) check(`certificate.${field}`, fit.certificate?.[field], certificate[field]);
  return differing;
}

const shown = (value: unknown): string => (value === undefined ? 'absent' : JSON.stringify(value));

const shortened = (wrong: readonly string[]): string[] =>
  wrong.length <= NAMES_MOST
    ? [...wrong]
    : [...wrong.slice(0, NAMES_MOST), `${wrong.length - NAMES_MOST} more of its numbers differ`];

const unknown = (fit: FitDocument, at: number, why: string): VerifiedFit => ({
  fit: at,
  lambda: fit.lambda,
  extent: 'uncertified',
  kind: null,
  relativeGap: null,
  ask: null,
  members: 0,
  at: null,
  atCoefficients: null,
  differences: [why],
});
