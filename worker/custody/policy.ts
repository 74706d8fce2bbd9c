import { type Failure, type FailureCode, fail } from '../../protocol/failure.js';
import type { Work } from '../../protocol/messages/round.js';
import type { Allowance, LeaveKind } from '../../protocol/messages/survey.js';
import { curvatureMatricesOf, sketchColumnsOf } from '../../protocol/numbers.js';
import { usedColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { Policy } from './site-file.js';

/**
 * What a custodian lets leave, checked where the rows are. Pure: each check takes the policy and what has left so far,
 * and says why not, or null.
 */

/** What has left in one run so far. */
export interface Departed {
  readonly asks: number;
  readonly numbers: number;
  readonly curvature: CurvatureCount;
}

/**
 * Curvature matrices by problem; `all` are those that serve every fit of the run (the factor). Columns of curvature
 * sent as products with directions are counted apart.
 */
export interface CurvatureCount {
  readonly all: number;
  readonly problems: ReadonlyMap<number, number>;
  readonly sketched: ReadonlyMap<number, number>;
}

/** What the curvature limit of a run is measured by. */
export interface RunSize {
  /** As `fitCount` counts them. */
  readonly fits: number;
  /** Solver columns p; null before the scaling is known, when no curvature can leave. */
  readonly columns: number | null;
}

export const NOTHING_DEPARTED: Departed = {
  asks: 0,
  numbers: 0,
  curvature: { all: 0, problems: new Map(), sketched: new Map() },
};

const refused = (code: FailureCode, message: string, remedy: string): Failure =>
  fail(code, message, { remedy }).failure;

const listed = (words: readonly string[]): string => words.join(', ');

/** Kinds of data that an answer to this work holds. */
export function kindsOfWork(work: Work): LeaveKind[] {
  switch (work.work) {
    case 'survey':
      return ['counts', 'moments'];
    case 'proximal':
      return ['proximal'];
    case 'joint':
      return ['proximal', 'gradients', 'curvature'];
    case 'factor':
      return ['curvature'];
    case 'scores':
      return curvatureMatricesOf(work) > 0 ? ['gradients', 'curvature'] : ['gradients'];
    case 'site-fit':
      return ['site-estimates'];
    case 'margins':
      return ['gradients'];
    case 'quality':
      return ['residual-bins'];
    case 'evaluate': {
      const kinds: LeaveKind[] = ['gradients'];
      if (curvatureMatricesOf(work) > 0) kinds.push('curvature');
      if (sketchColumnsOf(work) > 0) kinds.push('sketches');
      return kinds;
    }
  }
}

/** Curvature matrices and columns that this ask makes leave, by problem. */
export function curvatureOfWorks(works: readonly Work[]): CurvatureCount {
  let all = 0;
  const problems = new Map<number, number>();
  const sketched = new Map<number, number>();
  for (const work of works) {
    const matrices = curvatureMatricesOf(work);
    if (!('problem' in work)) {
      all += matrices;
      continue;
    }
    count(problems, work.problem, matrices);
    count(sketched, work.problem, sketchColumnsOf(work));
  }
  return { all, problems, sketched };
}

function count(into: Map<number, number>, problem: number, more: number): void {
  if (more > 0) into.set(problem, (into.get(problem) ?? 0) + more);
}

export function addCurvature(a: CurvatureCount, b: CurvatureCount): CurvatureCount {
  const problems = new Map(a.problems);
  const sketched = new Map(a.sketched);
  for (const [problem, matrices] of b.problems) count(problems, problem, matrices);
  for (const [problem, columns] of b.sketched) count(sketched, problem, columns);
  return { all: a.all + b.all, problems, sketched };
}

/** Matrices that left whole. */
export function curvatureTotal(counted: CurvatureCount): number {
  let total = counted.all;
  for (const matrices of counted.problems.values()) total += matrices;
  return total;
}

/** Matrices of each problem, where p sketched columns, begun or full, count as one: they tell as much. */
function matricesByProblem(counted: CurvatureCount, columns: number): number[] {
  const numbers = new Set([...counted.problems.keys(), ...counted.sketched.keys()]);
  return [...numbers].map(
    (problem) =>
      (counted.problems.get(problem) ?? 0) + Math.ceil((counted.sketched.get(problem) ?? 0) / columns),
  );
}

/** The part of the policy that the specification alone decides: columns and approval. */
export function checkSpecification(
  policy: Policy,
  spec: FitSpecification,
  digest: string,
  approved: ReadonlySet<string>,
): Failure | null {
  return checkColumns(policy, spec) ?? checkApproval(policy, digest, approved);
}

export function checkColumns(policy: Policy, spec: FitSpecification): Failure | null {
  const { columns } = policy;
  if (columns === 'any') return null;
  const allowed = new Set(columns);
  const used = usedColumns(spec).find(({ column }) => !allowed.has(column));
  if (used === undefined) return null;
  const permitted = columns.length === 0 ? 'no column' : listed(columns);
  return fail(
    'policy-column',
    `The specification uses column ${used.column} (as ${used.role}), the policy lets it use ${permitted}.`,
    {
      remedy: `Take ${used.column} out of the specification, or ask the custodian to add it to policy.columns.`,
      where: { column: used.column },
    },
  ).failure;
}

export function checkApproval(policy: Policy, digest: string, approved: ReadonlySet<string>): Failure | null {
  if (policy.approvals === 'any' || approved.has(digest)) return null;
  return refused(
    'policy-approval',
    `The custodian has not approved this specification (digest ${digest}).`,
    'The custodian can look at it with "commonfit-worker inspect" and let it in with "commonfit-worker approve".',
  );
}

export function checkRows(policy: Policy, rowsUsed: number): Failure | null {
  if (rowsUsed >= policy.rowsLeast) return null;
  return refused(
    'policy-rows',
    `This specification would use ${rowsUsed} rows here, the policy asks for at least ${policy.rowsLeast}.`,
    'Use terms with fewer missing values, run without this site, or ask the custodian to lower policy.rows-least.',
  );
}

/** Folds with fewer rows than this, where the policy asks for as many rows at all: their moments would show single rows. */
const FOLD_ROWS_LEAST = 5;

/** `starts`: where the rows of each fold begin, and the end of the last. */
export function checkFolds(
  { rowsLeast }: Policy,
  folds: { readonly labels: readonly string[]; readonly starts: readonly number[] } | null,
): Failure | null {
  const least = Math.min(rowsLeast, FOLD_ROWS_LEAST);
  const small = folds?.labels.findIndex((_, k) => folds.starts[k + 1] - folds.starts[k] < least) ?? -1;
  if (folds === null || small < 0) return null;
  return refused(
    'policy-rows',
    `Fold ${folds.labels[small]} would hold ${folds.starts[small + 1] - folds.starts[small]} rows here; fewer than ${least} do not leave as moments.`,
    'Choose with fewer folds, run without this site, or ask the custodian to lower policy.rows-least.',
  );
}

/** Whether a new ask may be answered after what has left so far. A repeated ask is not checked: it was counted once. */
export function checkWorks(
  policy: Policy,
  departed: Departed,
  works: readonly Work[],
  size: RunSize,
): Failure | null {
  return (
    checkKinds(policy, works) ??
    checkRounds(policy, departed) ??
    checkCurvature(policy, departed.curvature, curvatureOfWorks(works), size)
  );
}

function checkKinds(policy: Policy, works: readonly Work[]): Failure | null {
  for (const work of works) {
    const missing = kindsOfWork(work).filter((kind) => !policy.leave.includes(kind));
    if (missing.length > 0)
      return refused(
        'policy-kind',
        `An answer to ${work.work} holds ${listed(missing)}, the policy lets leave ${listed(policy.leave) || 'nothing'}.`,
        `Choose a lower rung (rounds.rung), or ask the custodian to add ${listed(missing)} to policy.leave.`,
      );
  }
  return null;
}

function checkRounds(policy: Policy, departed: Departed): Failure | null {
  if (policy.roundsMost === 'any' || departed.asks < policy.roundsMost) return null;
  return refused(
    'policy-rounds',
    `${departed.asks} asks of this run are answered, the policy allows ${policy.roundsMost}.`,
    'Loosen rounds.tolerance, or ask the custodian to raise policy.rounds-most.',
  );
}

/**
 * The limit of a fit times the fits of the run, whatever problem numbers an ask gives: problems about the same rows share
 * their points in one item, and made-up numbers gain nothing.
 */
function checkCurvature(
  policy: Policy,
  before: CurvatureCount,
  added: CurvatureCount,
  { fits, columns }: RunSize,
): Failure | null {
  const most = policy.curvatureMost;
  if (most === 'any' || (curvatureTotal(added) === 0 && added.sketched.size === 0)) return null;
  const after = addCurvature(before, added);
  const total = matricesByProblem(after, columns ?? 1).reduce((sum, one) => sum + one, after.all);
  if (total <= most * fits) return null;
  const counted = after.sketched.size > 0 ? `, ${columns} sketched columns counted as one,` : '';
  const allowed = fits === 1 ? `${most}` : `${most} a fit, ${most * fits} for the ${fits} fits of this run`;
  return refused(
    'policy-curvature',
    `With this ask ${total} curvature matrices of this run${counted} would have left, the policy allows ${allowed}.`,
    'Go on with proximal points, or ask the custodian to raise policy.curvature-most.',
  );
}

/** `numbers`: what this ask's answer holds, `departed` without it. */
export function checkNumbers(policy: Policy, departed: Departed, numbers: number): Failure | null {
  const after = departed.numbers + numbers;
  if (policy.numbersMost === 'any' || after <= policy.numbersMost) return null;
  return refused(
    'policy-numbers',
    `With this answer ${after} numbers of this run would have left, the policy allows ${policy.numbersMost}.`,
    'Use fewer terms or a lower rung (rounds.rung), or ask the custodian to raise policy.numbers-most.',
  );
}

/** What the survey tells the coordinator, so that it can choose the rung without trying. */
export function allowanceOf(policy: Policy): Allowance {
  const limit = (value: number | 'any'): number | null => (value === 'any' ? null : value);
  return {
    leave: [...policy.leave],
    curvatureMost: limit(policy.curvatureMost),
    numbersMost: limit(policy.numbersMost),
    roundsMost: limit(policy.roundsMost),
  };
}
