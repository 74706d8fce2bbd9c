import type { Complain } from './issues.js';
import { nearestName } from './nearest.js';
import type { WrittenTerm } from './schema-terms.js';
import type { LevelsTerm, NumericTerm, Term, Transform } from './types.js';

/**
 * Gives every term its name and resolves the factors of products. A factor is the name of a term, or its column: of
 * several terms of one column the first. Complaints name `terms[i].product[k]`.
 */
export function nameTerms(written: readonly WrittenTerm[], complain: Complain): Term[] {
  const takers = namesTaken(written);
  const listed = written.map((term): SingleTerm | null => {
    if (term.kind === 'product') return null;
    return { ...term, name: term.kind === 'levels' ? term.column : numericName(term, takers) };
  });
  const factorNamed = factorFinder(listed.filter((term) => term !== null));
  return written.flatMap((term, index): Term[] => {
    const single = listed[index] ?? null;
    if (single !== null || term.kind !== 'product') return single === null ? [] : [single];
    const factors = term.factors.flatMap((name, at) => {
      const factor = factorNamed(name);
      if (factor === undefined) complainOfFactor(name, listed, ['terms', index, 'product', at], complain);
      return factor === undefined ? [] : [factor];
    });
    if (factors.length < term.factors.length) return [];
    return [{ kind: 'product', factors, name: factors.map((factor) => factor.name).join(':') }];
  });
}

type SingleTerm = NumericTerm | LevelsTerm;

function factorFinder(listed: readonly SingleTerm[]): (name: string) => SingleTerm | undefined {
  const byName = new Map<string, SingleTerm>();
  const byColumn = new Map<string, SingleTerm>();
  for (const term of listed) {
    if (!byName.has(term.name)) byName.set(term.name, term);
    if (!byColumn.has(term.column)) byColumn.set(term.column, term);
  }
  return (name) => byName.get(name) ?? byColumn.get(name);
}

function complainOfFactor(
  name: string,
  listed: readonly (SingleTerm | null)[],
  path: readonly PropertyKey[],
  complain: Complain,
): void {
  const columns = listed.slice(0, 2000).flatMap((term) => (term === null ? [] : [term.column]));
  const near = nearestName(name, columns);
  complain(
    path,
    'field-value',
    `Found "${name}", which is no column of a listed term; allowed: columns of other terms.`,
    near === null
      ? `List "${name}" as a term of its own as well.`
      : `Did you mean "${near}"? Else list "${name}" as a term too.`,
  );
}

const isPower = (transform: Transform): transform is { readonly power: number } =>
  typeof transform === 'object';

/** By column, how many terms would take its bare name: all but powers. */
function namesTaken(written: readonly WrittenTerm[]): ReadonlyMap<string, number> {
  const takers = new Map<string, number>();
  for (const term of written) {
    if (term.kind === 'product' || (term.kind === 'numeric' && isPower(term.transform))) continue;
    takers.set(term.column, (takers.get(term.column) ?? 0) + 1);
  }
  return takers;
}

/**
 * `column^2` for a power; else the column, unless several terms of the column would take that name: then `log(column)`
 * and `sqrt(column)`, and the plain one keeps it.
 */
function numericName(
  term: Extract<WrittenTerm, { kind: 'numeric' }>,
  takers: ReadonlyMap<string, number>,
): string {
  const { column, transform } = term;
  if (isPower(transform)) return `${column}^${transform.power}`;
  return transform === 'none' || takers.get(column) === 1 ? column : `${transform}(${column})`;
}
