import { createHash } from 'node:crypto';
import { type Checked, fail, succeed } from '../failure.js';
import { specificationOf } from './parse.js';
import type { Choice, FitSpecification, LossForm, Penalty, ReportParts, Term } from './types.js';

/**
 * The canonical form: the fit specification as one line of JSON after RFC 8785, keys sorted by code unit at every depth
 * and no spaces, with every default written out. It has the fields of the YAML document, so one schema checks both. Two documents
 * that mean the same have the same text, whatever their layout, comments, key order or defaults left out.
 */
export const canonicalText = (specification: FitSpecification): string =>
  canonicalJson(documentOf(specification));

/** SHA-256 of the UTF-8 bytes, in hex. */
export const digestOf = (canonical: string): string =>
  createHash('sha256').update(canonical, 'utf8').digest('hex');

/** Reads what `canonicalText` wrote, checked like a document from a stranger; any other text is refused. */
export function readCanonical(text: string): Checked<FitSpecification> {
  let value: unknown;
  try {
    value = JSON.parse(text);
  } catch {
    return fail('field-type', 'The canonical fit specification is not JSON.', { where: { file: FILE } });
  }
  const parsed = specificationOf({ file: FILE, value, lineOf: () => undefined, failures: [] });
  if (!parsed.ok) {
    const first = parsed.failures[0];
    return first === undefined ? fail('internal', 'No failure was given.') : { ok: false, failure: first };
  }
  if (canonicalText(parsed.value) !== text) {
    const message = 'The text means a fit specification but is not its canonical form.';
    return fail('field-value', message, { where: { file: FILE } });
  }
  return succeed(parsed.value);
}

const FILE = 'canonical fit specification';

function documentOf(specification: FitSpecification): Record<string, unknown> {
  const { response, offset, weights, rounds, barrier } = specification;
  return {
    commonfit: 1,
    title: specification.title,
    sites: specification.sites,
    missing: specification.missing,
    response: { column: response.column, positive: response.positive ?? undefined },
    loss: writtenLossOf(specification.loss),
    ...(offset === null ? {} : { [offset.kind]: { column: offset.column } }),
    weights: weights === null ? undefined : { column: weights.column },
    intercept: specification.intercept,
    terms: specification.terms.map(writtenTermOf),
    penalty: specification.penalties.map(writtenPenaltyOf),
    choose: specification.choose === null ? undefined : writtenChoiceOf(specification.choose),
    report: writtenReportOf(specification.report),
    rounds,
    barrier: {
      deadline: `${barrier.deadlineMs}ms`,
      quorum: barrier.quorum,
      oldest: barrier.oldest,
      patience: `${barrier.patienceMs}ms`,
      missing: barrier.missing,
    },
  };
}

const writtenLossOf = (loss: LossForm): unknown =>
  loss.kind === 'huber' ? { kind: loss.kind, threshold: loss.threshold } : loss.kind;

function writtenTermOf(term: Term): Record<string, unknown> {
  if (term.kind === 'product') return { product: term.factors.map((factor) => factor.name) };
  const { column } = term;
  return term.kind === 'levels'
    ? { column, levels: term.levels, baseline: term.baseline }
    : { column, unit: term.unit ?? undefined, transform: term.transform };
}

const writtenPenaltyOf = (penalty: Penalty): Record<string, unknown> => ({
  kind: penalty.kind,
  lambda: penalty.path ?? penalty.lambda,
  l1: penalty.kind === 'elastic-net' ? penalty.l1 : undefined,
  scaled: penalty.scaled,
  'per-term': penalty.perTerm,
});

function writtenChoiceOf(choice: Choice): Record<string, unknown> {
  if (choice.kind === 'criterion') return { criterion: choice.criterion };
  const { by, rule } = choice;
  return by.kind === 'hash'
    ? { folds: by.folds, seed: by.seed, rule }
    : { folds: { column: by.column }, rule };
}

/** What is asked, in a fixed order; undefined where nothing is. */
function writtenReportOf(report: ReportParts): unknown[] | undefined {
  const { sandwich, profile } = report;
  const clustered = sandwich === null || sandwich.cluster === null ? null : { cluster: sandwich.cluster };
  const parts = [
    report.covariance ? 'covariance' : null,
    sandwich === null ? null : clustered === null ? 'sandwich' : { sandwich: clustered },
    report.termTests ? 'term-tests' : null,
    profile.length === 0 ? null : { profile },
    report.debiased ? 'debiased' : null,
    report.margins ? 'margins' : null,
    report.compareSites ? 'compare-sites' : null,
    report.fitQuality ? 'fit-quality' : null,
  ].filter((part) => part !== null);
  return parts.length === 0 ? undefined : parts;
}

/** Members without a value are left out. */
function canonicalJson(value: unknown): string {
  if (Array.isArray(value)) return `[${value.map(canonicalJson).join(',')}]`;
  if (typeof value !== 'object' || value === null) return JSON.stringify(value);
  const members = Object.entries(value).filter(([, member]) => member !== undefined);
  members.sort(([a], [b]) => (a < b ? -1 : 1));
  return `{${members.map(([key, member]) => `${JSON.stringify(key)}:${canonicalJson(member)}`).join(',')}}`;
}
