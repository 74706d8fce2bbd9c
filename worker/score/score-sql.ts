import type { ModelInput } from '../design/predictor.js';
import { doubleSql, levelsSql, numericSql, textSql } from '../source/column-sql.js';
import { sqlName, sqlText } from '../source/duckdb.js';
import type { RelationColumn } from '../source/relation.js';
import type { ScoreFormat, ScoreRelation } from './score-relation.js';

/** Names under which SQL calls back into this program. */
export const FUNCTIONS = {
  predictor: 'commonfit_linear_predictor',
  mean: 'commonfit_prediction',
  note: 'commonfit_note',
} as const;

export const enumName = (position: number): string => `model_levels${position}`;

/** A number or a code for each input, without SQL nulls; and the text of each as it stands in the table. */
export function inputSql(
  relation: ScoreRelation,
  inputs: readonly ModelInput[],
): { values: string[]; texts: string[] } {
  const columnOf = (name: string) => {
    const column = relation.columns.get(name);
    if (column === undefined) throw new Error(`the relation has no column ${name}`);
    return column;
  };
  return {
    values: inputs.map(({ column, levels }, position) =>
      levels === null ? numberSql(columnOf(column)) : levelsSql(columnOf(column), levels, enumName(position)),
    ),
    texts: inputs.map(({ column }) => textSql(columnOf(column))),
  };
}

/**
 * Like `numericSql`, but for a column of numbers an infinite value stays one, which spares a look at each: it cannot be
 * scored either, and its text tells it from a missing one.
 */
const numberSql = (column: RelationColumn): string =>
  column.type === 'number' ? `coalesce(${doubleSql(column)}, 'inf'::double)` : numericSql(column);

/** The statement that writes the output file. */
export function copySql(options: {
  relation: ScoreRelation;
  inputs: readonly ModelInput[];
  /** Columns of the table to write before the prediction. */
  columns: readonly string[];
  flagRows: boolean;
  format: ScoreFormat;
  out: string;
}): string {
  const { relation, inputs, columns, flagRows, format, out } = options;
  const { values, texts } = inputSql(relation, inputs);
  const passed = columns.map((name, position) => `${relation.written(name, format)} as p${position}`);
  const named = (list: readonly string[], letter: string) =>
    flagRows ? list.map((sql, position) => `${sql} as ${letter}${position}`) : [];
  // an intercept alone is given a column as well, or DuckDB would take one call for all rows
  const given = values.length === 0 ? ['0.0::double'] : values;
  const eta = `${FUNCTIONS.predictor}(${given.join(', ')}) as eta`;
  const inner = [...passed, eta, ...named(values, 'v'), ...named(texts, 't')].join(', ');
  const sound = (sql: string) => (flagRows ? `case when isnan(eta) then null else ${sql} end` : sql);
  const noteInputs = [...values.map((_, at) => `v${at}`), ...texts.map((_, at) => `t${at}`)].join(', ');
  const note = `case when isnan(eta) then ${FUNCTIONS.note}(${noteInputs}) end as note`;
  const outer = [
    ...columns.map((name, position) => `p${position} as ${sqlName(name)}`),
    `${sound(`${FUNCTIONS.mean}(eta)`)} as prediction`,
    `${sound('eta')} as linear_predictor`,
    ...(flagRows ? [note] : []),
  ].join(', ');
  return `copy (select ${outer} from (select ${inner} from ${relation.from})) to ${sqlText(out)} (${FORMAT[format]})`;
}

const FORMAT: Readonly<Record<ScoreFormat, string>> = {
  csv: 'format csv, header true',
  parquet: 'format parquet',
  jsonl: 'format json, array false',
};

/** The first row that cannot be scored: its 0-based number, then its values and its texts. */
export function firstFaultSql(relation: ScoreRelation, inputs: readonly ModelInput[]): string {
  const { values, texts } = inputSql(relation, inputs);
  const inner = [
    'row_number() over () - 1 as r',
    ...values.map((sql, at) => `${sql} as v${at}`),
    ...texts.map((sql, at) => `${sql} as t${at}`),
  ].join(', ');
  const given = values.length === 0 ? '0.0::double' : values.map((_, at) => `v${at}`).join(', ');
  const outer = ['r', ...values.map((_, at) => `v${at}`), ...texts.map((_, at) => `t${at}`)].join(', ');
  return `select ${outer} from (select ${inner} from ${relation.from}) where isnan(${FUNCTIONS.predictor}(${given})) limit 1`;
}
