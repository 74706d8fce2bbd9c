import type { DesignColumn, FitSpecification, LevelsTerm, NumericTerm, Penalty, Term } from './types.js';

type Factor = DesignColumn['factors'][number];
interface NamedFactor {
  readonly name: string;
  readonly factor: Factor;
}

/**
 * The coefficients in the order of the terms; within a product the last factor runs fastest. Names: the term's name,
 * `material=steel` for a level, `a:b` for a product. The baseline of a levels term has none, in products as well.
 */
export function designColumns(specification: Pick<FitSpecification, 'terms'>): DesignColumn[] {
  return specification.terms.flatMap((term, index) =>
    combinations(factorsOf(term)).map((combination) => ({
      name: combination.map((part) => part.name).join(':'),
      term: index,
      factors: combination.map((part) => part.factor),
    })),
  );
}

/** The names of the coefficients alone: of a million, far less than what each is made of. */
export const designColumnNames = ({ terms }: Pick<FitSpecification, 'terms'>): string[] =>
  terms.flatMap((term) =>
    factorNames(term).reduce((heads, names) =>
      heads.flatMap((head) => names.map((name) => `${head}:${name}`)),
    ),
  );

/** The names that a term's coefficients are made of, by factor; one list where it is no product. */
export const factorNames = (term: Term): string[][] =>
  factorsOf(term).map((choices) => choices.map(({ name }) => name));

/** How many coefficients the terms have, without making them. */
export const designColumnCount = (terms: readonly Term[]): number =>
  terms.reduce(
    (sum, term) => sum + factorsOf(term).reduce((product, choices) => product * choices.length, 1),
    0,
  );

const factorsOf = (term: Term): NamedFactor[][] =>
  (term.kind === 'product' ? term.factors : [term]).map(choicesOf);

function choicesOf(term: NumericTerm | LevelsTerm): NamedFactor[] {
  const { column } = term;
  if (term.kind === 'numeric') {
    return [{ name: term.name, factor: { kind: 'numeric', column, transform: term.transform } }];
  }
  return term.levels
    .filter((level) => level !== term.baseline)
    .map((level) => ({ name: `${column}=${level}`, factor: { kind: 'level', column, level } }));
}

const combinations = (factors: readonly NamedFactor[][]): NamedFactor[][] =>
  factors.reduce<NamedFactor[][]>(
    (made, choices) => made.flatMap((head) => choices.map((choice) => [...head, choice])),
    [[]],
  );

export interface UsedColumn {
  readonly column: string;
  readonly role: 'response' | 'exposure' | 'offset' | 'weights' | 'term' | 'fold' | 'cluster';
}

/** Every column of the table that the specification reads, once for each role it has. */
export function usedColumns(specification: FitSpecification): UsedColumn[] {
  const { response, offset, weights, terms, choose, report } = specification;
  const used: UsedColumn[] = [{ column: response.column, role: 'response' }];
  if (offset !== null) used.push({ column: offset.column, role: offset.kind });
  if (weights !== null) used.push({ column: weights.column, role: 'weights' });
  const termColumns = terms.flatMap((term) => (term.kind === 'product' ? [] : [term.column]));
  for (const column of new Set(termColumns)) used.push({ column, role: 'term' });
  if (choose?.kind === 'folds' && choose.by.kind === 'column')
    used.push({ column: choose.by.column, role: 'fold' });
  const cluster = report.sandwich?.cluster ?? null;
  if (cluster !== null) used.push({ column: cluster, role: 'cluster' });
  return used;
}

/**
 * A penalty's multiplier of each coefficient, in design order: what `per-term` gives for the coefficient's name, else
 * for its term's name, else 1.
 */
export function perTermMultipliers(
  penalty: Pick<Penalty, 'perTerm'>,
  terms: readonly Term[],
  columns: readonly DesignColumn[],
): number[] {
  const given = new Map(Object.entries(penalty.perTerm));
  return columns.map((column) => given.get(column.name) ?? given.get(terms[column.term]?.name ?? '') ?? 1);
}
