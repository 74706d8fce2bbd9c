import type { Failure } from '../failure.js';
import { designColumns } from './design-columns.js';
import { type Complain, failuresOfIssues } from './issues.js';
import { checkRules } from './rules.js';
import { profiledColumns } from './rules-analysis.js';
import { type FitDocument, fitDocument, type WrittenPenalty } from './schema.js';
import type { WrittenPart } from './schema-choose.js';
import { nameTerms } from './terms.js';
import type { FitSpecification, Penalty, ReportParts, Term } from './types.js';
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
    choose: document.choose ?? null,
    report: reportFrom(document.report, terms),
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
  lambda: Array.isArray(written.lambda) ? written.lambda : [],
  path: Array.isArray(written.lambda) ? null : written.lambda,
  l1: written.l1 ?? L1_OF_KIND[written.kind],
  scaled: written.scaled,
  // A multiplier of 1 written out is the default.
  perTerm: Object.fromEntries(
    Object.entries(written['per-term']).filter(([, multiplier]) => multiplier !== 1),
  ),
});

function reportFrom(written: readonly WrittenPart[], terms: readonly Term[]): ReportParts {
  const has = (part: WrittenPart['part']): boolean => written.some((entry) => entry.part === part);
  const sandwich = written.find((entry) => entry.part === 'sandwich');
  const names = written.flatMap((entry) => (entry.part === 'profile' ? entry.names : []));
  return {
    covariance: has('covariance') || has('sandwich') || has('term-tests'),
    sandwich: sandwich === undefined ? null : { cluster: sandwich.cluster },
    termTests: has('term-tests'),
    profile: names.length === 0 ? [] : profiledColumns(names, terms, designColumns({ terms })),
    debiased: has('debiased'),
    margins: has('margins'),
    compareSites: has('compare-sites'),
    fitQuality: has('fit-quality'),
  };
}
