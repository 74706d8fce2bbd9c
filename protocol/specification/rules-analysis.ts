import { LIMITS } from '../limits.js';
import { designColumns } from './design-columns.js';
import type { Complain } from './issues.js';
import { nearestName } from './nearest.js';
import type { FitDocument, WrittenPenalty } from './schema.js';
import type { DesignColumn, Term } from './types.js';

/** Rules about penalties, the choice among fits and what is reported of a fit. */

export function checkPenalties(penalties: readonly WrittenPenalty[], complain: Complain): void {
  for (const [index, penalty] of penalties.entries()) checkMixture(penalty, index, complain);
  checkLambdaLengths(penalties, complain);
}

function checkMixture(penalty: WrittenPenalty, index: number, complain: Complain): void {
  const path = ['penalty', index, 'l1'];
  if (penalty.kind === 'elastic-net' && penalty.l1 === undefined) {
    const message = 'The field "l1" is missing; allowed: a number from 0 to 1.';
    complain(path, 'field-missing', message, 'Add l1, the share of the lasso part.');
  }
  if (penalty.kind !== 'elastic-net' && penalty.l1 !== undefined) {
    const message = `Found l1 with the kind ${penalty.kind}; allowed: only with elastic-net.`;
    complain(path, 'field-conflict', message, 'Remove it, or use the kind elastic-net.');
  }
}

function checkLambdaLengths(penalties: readonly WrittenPenalty[], complain: Complain): void {
  const path = penalties.findIndex(({ lambda }) => !Array.isArray(lambda));
  const first =
    path >= 0 ? path : penalties.findIndex(({ lambda }) => Array.isArray(lambda) && lambda.length > 1);
  const length = fitsOf(penalties[first]);
  penalties.forEach((penalty, index) => {
    const own = fitsOf(penalty);
    if (index === first || own === 1) return;
    const at = ['penalty', index, 'lambda'];
    if (path >= 0) {
      const found = Array.isArray(penalty.lambda) ? `${own} values` : 'a path';
      const message = `Found ${found} beside the path of penalty[${path}]; allowed: one value.`;
      complain(at, 'field-conflict', message, 'Keep one path, and one value for every other penalty.');
    } else if (own !== length) {
      const message = `Found ${own} values, where penalty[${first}] has ${length}; allowed: ${length} or one.`;
      complain(at, 'field-conflict', message, 'Give lists of the same length: one fit for each place.');
    }
  });
}

const fitsOf = (penalty: WrittenPenalty | undefined): number =>
  penalty === undefined ? 1 : Array.isArray(penalty.lambda) ? penalty.lambda.length : penalty.lambda.count;

export function checkAnalysis(document: Partial<FitDocument>, complain: Complain): void {
  checkChoice(document, complain);
  checkFoldColumns(document, complain);
  const debiased = (document.report ?? []).findIndex(({ part }) => part === 'debiased');
  if (debiased >= 0 && document.penalty?.length === 0) {
    const message = 'Found debiased without a penalty; allowed: only for a penalised fit.';
    complain(['report', debiased], 'field-conflict', message, 'Use covariance, or add a penalty.');
  }
}

/** A choice needs something to choose from, and problems that one ask can carry. */
function checkChoice({ choose, penalty }: Partial<FitDocument>, complain: Complain): void {
  if (choose === undefined || penalty === undefined) return;
  const fits = Math.max(1, ...penalty.map(fitsOf));
  if (fits === 1) {
    const found = penalty.length === 0 ? 'no penalty' : 'a single lambda';
    const message = `Found a choice with ${found}; allowed: with two values of lambda or more.`;
    const remedy = 'Give a penalty a list of lambda or a path, such as {count: 30, ratio: 1e-3}.';
    complain(['choose'], 'field-conflict', message, remedy);
  }
  if (choose.kind !== 'folds' || choose.by.kind !== 'hash') return;
  const problems = fits * (1 + choose.by.folds);
  if (problems > LIMITS.batchMost) {
    const message = `Found ${choose.by.folds} folds of ${fits} fits, ${problems} problems in all; allowed: at most ${LIMITS.batchMost}.`;
    complain(['choose', 'folds'], 'field-conflict', message, 'Use fewer folds or fewer values of lambda.');
  }
}

/** Rows must not be dealt to folds or clusters by what they respond. */
function checkFoldColumns({ choose, report, response }: Partial<FitDocument>, complain: Complain): void {
  const refuse = (column: string | null, as: string, path: readonly PropertyKey[]) => {
    if (column === null || column !== response?.column) return;
    const message = `Found the response column "${column}" as ${as}; allowed: another column.`;
    complain(path, 'field-conflict', message, 'Name another column.');
  };
  if (choose?.kind === 'folds' && choose.by.kind === 'column')
    refuse(choose.by.column, 'folds', ['choose', 'folds', 'column']);
  for (const [index, entry] of (report ?? []).entries())
    if (entry.part === 'sandwich')
      refuse(entry.cluster, 'clusters', ['report', index, 'sandwich', 'cluster']);
}

interface Named {
  readonly name: string;
  readonly path: readonly PropertyKey[];
}

/** Names of terms or coefficients, in `per-term` and `profile`. */
export function checkNamed(document: Partial<FitDocument>, terms: readonly Term[], complain: Complain): void {
  const perTerm = (document.penalty ?? []).flatMap((penalty, index): Named[] =>
    Object.keys(penalty['per-term']).map((name) => ({ name, path: ['penalty', index, 'per-term', name] })),
  );
  const profiled = (document.report ?? []).flatMap((entry, index): Named[] =>
    entry.part === 'profile'
      ? entry.names.map((name, at) => ({ name, path: ['report', index, 'profile', at] }))
      : [],
  );
  if (perTerm.length + profiled.length === 0) return;
  const columns = designColumns({ terms });
  checkKnown(
    [...perTerm, ...profiled],
    [...new Set([...terms, ...columns].map(({ name }) => name))],
    complain,
  );
  const names = profiled.map(({ name }) => name);
  const count = profiledColumns(names, terms, columns).length;
  if (count > PROFILES_MOST) {
    const message = `Found profiles of ${count} coefficients; allowed: at most ${PROFILES_MOST}.`;
    complain(
      [...profiled[0].path.slice(0, -1)],
      'field-value',
      message,
      'Name coefficients, not whole terms.',
    );
  }
}

/** Most coefficients that are profiled: each takes several fits. */
const PROFILES_MOST = 100;

/** The coefficients that these names of terms or coefficients stand for, in design order. */
export function profiledColumns(
  names: readonly string[],
  terms: readonly Term[],
  columns: readonly DesignColumn[],
): string[] {
  const asked = new Set(names);
  return columns
    .filter(({ name, term }) => asked.has(name) || asked.has(terms[term]?.name ?? ''))
    .map(({ name }) => name);
}

function checkKnown(named: readonly Named[], known: readonly string[], complain: Complain): void {
  const set = new Set(known);
  for (const { name, path } of named) {
    if (set.has(name)) continue;
    const near = nearestName(name, known.slice(0, 2000));
    const list = known.length > 20 ? `${known.slice(0, 20).join(', ')}, …` : known.join(', ');
    const message = `Found "${name}", which is no term or coefficient; allowed: ${list}.`;
    const remedy = near === null ? 'Name a term or a coefficient.' : `Did you mean "${near}"?`;
    complain(path, 'field-unknown', message, remedy);
  }
}
