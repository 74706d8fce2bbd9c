import { usedColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification, LevelsTerm, NumericTerm } from '../../protocol/specification/types.js';
import type { LevelsRequest, TableRequest } from '../source/table.js';

/**
 * The columns that a specification uses. A logistic response with a positive class named is read as levels, of which
 * the first is the positive one and one other may follow. Folds and clusters are labels, whatever else the column is.
 */
export function tableRequest(
  spec: FitSpecification,
  shard: { readonly index: number; readonly of: number },
): TableRequest {
  const numeric = new Set<string>();
  const levels = new Map<string, LevelsRequest>();
  const { column, positive } = spec.response;
  if (positive === null) numeric.add(column);
  else levels.set(column, { column, levels: [positive], others: 'one' });
  if (spec.offset !== null) numeric.add(spec.offset.column);
  if (spec.weights !== null) numeric.add(spec.weights.column);
  for (const factor of factorsOf(spec)) {
    if (factor.kind === 'numeric') numeric.add(factor.column);
    else {
      // two terms may list different levels of one column; what each permits is checked when its columns are built
      const before = levels.get(factor.column)?.levels ?? [];
      levels.set(factor.column, {
        column: factor.column,
        levels: [...new Set([...before, ...factor.levels])],
      });
    }
  }
  const labels = usedColumns(spec).filter(({ role }) => role === 'fold' || role === 'cluster');
  return {
    numeric: [...numeric],
    levels: [...levels.values()],
    labels: [...new Set(labels.map((used) => used.column))],
    missing: spec.missing,
    shard,
  };
}

/** Every numeric and levels term, those inside products among them. */
export const factorsOf = (spec: Pick<FitSpecification, 'terms'>): (NumericTerm | LevelsTerm)[] =>
  spec.terms.flatMap((term) => (term.kind === 'product' ? term.factors : [term]));
