import { LIMITS } from '../limits.js';
import { designColumnCount, designColumnNames, factorNames } from './design-columns.js';
import type { Complain } from './issues.js';
import { checkAnalysis, checkNamed, checkPenalties } from './rules-analysis.js';
import type { FitDocument } from './schema.js';
import type { Term } from './types.js';

/** Most coefficients: the wire carries their names in one list. */
const COEFFICIENTS_MOST = Math.min(LIMITS.coefficientsMost, LIMITS.elementsMost);

/** Rules that span fields, over the fields that are sound by themselves. */
export function checkRules(
  document: Partial<FitDocument>,
  terms: readonly Term[] | null,
  complain: Complain,
): void {
  checkOffsets(document, complain);
  checkColumnRoles(document, complain);
  checkPenalties(document.penalty ?? [], complain);
  checkAnalysis(document, complain);
  checkBarrier(document, complain);
  if (terms !== null) checkTerms(document, terms, complain);
}

function checkOffsets(document: Partial<FitDocument>, complain: Complain): void {
  if (document.exposure !== undefined && document.offset !== undefined) {
    complain(
      ['offset'],
      'field-conflict',
      'Found both exposure and offset; allowed: one of them.',
      'Remove one of the two.',
    );
  }
  if (
    document.response?.positive !== undefined &&
    document.loss !== undefined &&
    document.loss.kind !== 'logistic'
  ) {
    const message = `Found a positive value with the loss ${document.loss.kind}; allowed: only with logistic.`;
    complain(['response', 'positive'], 'field-conflict', message, 'Remove it, or use the logistic loss.');
  }
}

/** A column is read once, as numbers or as levels; and the response explains nothing else. */
function checkColumnRoles(document: Partial<FitDocument>, complain: Complain): void {
  const response = document.response?.column;
  for (const field of ['exposure', 'offset', 'weights'] as const) {
    if (response !== undefined && document[field]?.column === response) {
      const message = `Found the response column "${response}" as ${field}; allowed: another column.`;
      complain([field, 'column'], 'field-conflict', message, 'Name another column.');
    }
  }
  const numeric = new Set(
    [document.exposure, document.offset, document.weights].map((field) => field?.column),
  );
  for (const term of document.terms ?? []) if (term.kind === 'numeric') numeric.add(term.column);
  (document.terms ?? []).forEach((term, index) => {
    if (term.kind === 'product') return;
    const path = ['terms', index, 'column'];
    if (term.column === response) {
      const message = `Found the response column "${term.column}" as a term; allowed: other columns.`;
      complain(path, 'field-conflict', message, 'Remove the term.');
    } else if (term.kind === 'levels' && numeric.has(term.column)) {
      const message = `Found "${term.column}" with levels and as a numeric column; allowed: one of the two.`;
      complain(path, 'field-conflict', message, 'Keep one use of the column.');
    }
  });
}

/** A quorum lets answers of the late stand in, which need an age that they may have. */
function checkBarrier({ barrier, sites }: Partial<FitDocument>, complain: Complain): void {
  if (barrier === undefined) return;
  const { quorum, oldest } = barrier;
  if (quorum === 'all') {
    if (oldest === 0) return;
    const message = `Found oldest: ${oldest} with quorum: all; allowed: 0, as every round hears every site.`;
    complain(
      ['barrier', 'oldest'],
      'field-conflict',
      message,
      'Remove it, or set quorum to a number of sites.',
    );
    return;
  }
  if (oldest === 0) {
    const message = `Found quorum: ${quorum} with oldest: 0, so that no older answer may stand in; allowed: oldest of 1 or more.`;
    complain(
      ['barrier', 'oldest'],
      'field-conflict',
      message,
      'Set it, for instance to 40, or use quorum: all.',
    );
  }
  if (Array.isArray(sites) && quorum > sites.length) {
    const message = `Found a quorum of ${quorum} among ${sites.length} sites; allowed: 1 to ${sites.length}, or all.`;
    complain(['barrier', 'quorum'], 'field-conflict', message, 'Use a quorum of at most as many sites.');
  }
}

function checkTerms(document: Partial<FitDocument>, terms: readonly Term[], complain: Complain): void {
  const count = designColumnCount(terms);
  if (count === 0 && document.intercept !== 'shared') {
    const message =
      document.intercept === 'per-site'
        ? 'Found no terms and an intercept for each site; allowed: a model with a coefficient that sites share.'
        : 'Found no terms and no intercept; allowed: a model with a coefficient.';
    complain(['terms'], 'field-conflict', message, 'List a term, or use intercept: shared.');
    return;
  }
  if (count > COEFFICIENTS_MOST) {
    const message = `The terms have ${count} coefficients; allowed: at most ${COEFFICIENTS_MOST}.`;
    complain(['terms'], 'field-value', message, 'Leave out products of columns with many levels.');
    return;
  }
  checkNames(terms, complain);
  checkNamed(document, terms, complain);
}

function checkNames(terms: readonly Term[], complain: Complain): void {
  const apart = productsApart(terms);
  const owner = new Map<string, number>();
  const told = new Set<number>();
  terms.forEach((term, index) => {
    if (apart.has(index)) return;
    for (const name of designColumnNames({ terms: [term] })) {
      // The order of a product's factors does not make another column.
      const key = term.kind === 'product' ? name.split(':').sort().join(':') : name;
      const first = owner.get(key);
      if (first === undefined) owner.set(key, index);
      else if (!told.has(index)) {
        told.add(index);
        const message = `Found the coefficient "${name}" a second time (terms[${first}] has it); allowed: each once.`;
        complain(['terms', index], 'field-conflict', message, 'Remove one of the two terms.');
      }
    }
  });
}

/** Products of more coefficients than this are looked at by their factors first. */
const NAMES_MOST = 10_000;

/**
 * Large products that have no coefficient in common with any term, by their factors' names alone: a million names need
 * not be made to be found different. None where a name holds the colon that joins names.
 */
function productsApart(terms: readonly Term[]): Set<number> {
  const large = terms.flatMap((term, index) =>
    term.kind === 'product' && designColumnCount([term]) > NAMES_MOST ? [index] : [],
  );
  if (large.length === 0) return new Set();
  const names = terms.map((term) => factorNames(term).map((own) => new Set(own)));
  if (names.some((factors) => factors.some((own) => [...own].some((name) => name.includes(':')))))
    return new Set();
  const meets = (a: Set<string>, b: Set<string>): boolean => [...a].some((name) => b.has(name));
  return new Set(
    large.filter((index) => {
      const own = names[index];
      if (own.some((factor, k) => own.slice(k + 1).some((other) => meets(factor, other)))) return false;
      return names.every(
        (other, at) =>
          at === index ||
          other.length !== own.length ||
          !own.every((factor) => other.some((one) => meets(factor, one))),
      );
    }),
  );
}
