import type { Failure } from '../failure.js';
import { failuresOfIssues } from './issues.js';
import { type Complain, checkRules } from './rules.js';
import { type FitDocument, fitDocument, type WrittenPenalty } from './schema.js';
import { nameTerms } from './terms.js';
import type { FitSpecification, Penalty, Term } from './types.js';
import { type DocumentSource, type Parsed, placeOf, readYaml } from './yaml-document.js';

/** Reads `NAME.fit.yaml`. `file` is named in failures as given; all that is wrong is reported, in the order of the fields. */
export function parseFitSpecification(text: string, file: string): Parsed<FitSpecification> {
  const source = readYaml(text, file);
  return source.ok ? specificationOf(source.value) : source;
}

/** Checks a document that is already plain values. */
export function specificationOf(source: DocumentSource): Parsed<FitSpecification> {
  const result = fitDocument.safeParse(source.value);
  const failures: Failure[] = [...source.failures];
  if (!result.success) failures.push(...failuresOfIssues(result.error.issues, source));
  const complain: Complain = (path, code, message, remedy) =>
    failures.push({ code, message, remedy, where: placeOf(source, path) });

  const document = result.success ? result.data : soundFields(source.value);
  const complaintsBefore = failures.length;
  const terms = document.terms === undefined ? null : nameTerms(document.terms, complain);
  checkRules(document, failures.length === complaintsBefore ? terms : null, complain);
  if (!result.success || terms === null || failures.length > 0) return { ok: false, failures };
  return { ok: true, value: specificationFrom(result.data, terms) };
}

/** The fields that are right by themselves, so that rules between them are checked although others are wrong. */
function soundFields(value: unknown): Partial<FitDocument> {
  if (typeof value !== 'object' || value === null) return {};
  const written = value as Record<string, unknown>;
  const sound = Object.entries(fitDocument.shape).flatMap(([name, schema]) => {
    const result = schema.safeParse(written[name]);
    return result.success ? [[name, result.data] as const] : [];
  });
  return Object.fromEntries(sound) as Partial<FitDocument>;
}

function specificationFrom(document: FitDocument, terms: readonly Term[]): FitSpecification {
  const { rounds, barrier, exposure, offset } = document;
  return {
    title: document.title,
    sites: document.sites,
    missing: document.missing,
    response: { column: document.response.column, positive: document.response.positive ?? null },
    loss: document.loss,
    offset:
      exposure !== undefined
        ? { kind: 'exposure', column: exposure.column }
        : offset !== undefined
          ? { kind: 'offset', column: offset.column }
          : null,
    weights: document.weights === undefined ? null : { column: document.weights.column },
    intercept: document.intercept,
    terms,
    penalties: document.penalty.map(penaltyFrom),
    rounds: { tolerance: rounds.tolerance, most: rounds.most, rung: rounds.rung },
    barrier: {
      deadlineMs: barrier.deadline,
      quorum: barrier.quorum,
      oldest: barrier.oldest,
      patienceMs: barrier.patience,
      missing: barrier.missing,
    },
  };
}

const L1_OF_KIND = { ridge: 0, lasso: 1, 'elastic-net': 0 } as const;

const penaltyFrom = (written: WrittenPenalty): Penalty => ({
  kind: written.kind,
  lambda: written.lambda,
  l1: written.l1 ?? L1_OF_KIND[written.kind],
  scaled: written.scaled,
  // A multiplier of 1 written out is the default.
  perTerm: Object.fromEntries(
    Object.entries(written['per-term']).filter(([, multiplier]) => multiplier !== 1),
  ),
});
