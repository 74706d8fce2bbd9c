import type { ModelDocument } from '../../protocol/model/model-document.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { DesignColumn } from '../../protocol/specification/types.js';
import type { ModelInput } from './predictor.js';
import { factorsOf } from './request.js';

/** Which levels the rows of a fit have shown. */
export interface LevelRules {
  /** By input and code: true where every term lists the level and some row of the fit had it. */
  readonly seen: readonly (readonly boolean[])[];
  /** Levels of several columns that no row of the fit had at once. */
  readonly neverTogether: readonly (readonly { readonly position: number; readonly code: number }[])[];
}

type LevelFactor = Extract<DesignColumn['factors'][number], { kind: 'level' }>;

/**
 * An indicator that was dropped had one value in every row of the fit. It was 0, so that no row had the level (or the
 * levels together), unless all rows had it; and then no other level of the column has a coefficient either.
 */
export function levelRules(model: ModelDocument, inputs: readonly ModelInput[]): LevelRules {
  const kept = new Set(model.coefficients.map(({ name }) => name));
  const columns = designColumns(model);
  const varied = new Set(
    columns.flatMap(({ name, factors }) =>
      factors.length === 1 && factors[0].kind === 'level' && kept.has(name) ? [factors[0].column] : [],
    ),
  );
  const listedBy = (column: string) =>
    factorsOf(model).flatMap((term) =>
      term.kind === 'levels' && term.column === column ? [term.levels] : [],
    );
  const seen = inputs.map(({ column, levels }) =>
    (levels ?? []).map((level) => listedBy(column).every((listed) => listed.includes(level))),
  );
  const neverTogether: { position: number; code: number }[][] = [];
  for (const { name, factors } of columns) {
    if (kept.has(name) || !factors.every((factor): factor is LevelFactor => factor.kind === 'level'))
      continue;
    if (!factors.some(({ column }) => varied.has(column))) continue;
    const places = factors.map(({ column, level }) => {
      const position = inputs.findIndex((input) => input.column === column);
      return { position, code: inputs[position]?.levels?.indexOf(level) ?? -1 };
    });
    if (places.some(({ position }) => position < 0)) continue;
    if (places.length === 1) seen[places[0].position][places[0].code] = false;
    else neverTogether.push(places);
  }
  return { seen, neverTogether };
}
