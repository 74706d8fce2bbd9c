import { sqlText } from './duckdb.js';
import type { RelationColumn } from './relation.js';

/**
 * Every column is read as doubles without SQL nulls, so that a chunk is one plain array. What cannot be used is marked:
 * in numeric columns +∞ for a missing value, NaN for text that is no number and for a number that is not finite; in
 * level columns −2 for a missing value, −1 for a value that is not permitted.
 */
export const MARK = { numericMissing: Number.POSITIVE_INFINITY, levelMissing: -2, levelUnknown: -1 } as const;

/** The value as text, null where missing. Empty text counts as missing in every kind of source. */
export const textSql = (column: RelationColumn): string =>
  column.type === 'number' ? `cast(${column.sql} as varchar)` : `nullif(${column.sql}, '')`;

/** The value as the nearest double, null where missing or no number. DuckDB's digit separators are not numbers here. */
export const doubleSql = (column: RelationColumn): string =>
  column.type === 'number'
    ? `cast(${column.sql} as double)`
    : `case when contains(${column.sql}, '_') then null else try_cast(${column.sql} as double) end`;

/** Finite double, or a mark. */
export function numericSql(column: RelationColumn): string {
  const number = doubleSql(column);
  const value = column.type === 'number' ? column.sql : textSql(column);
  return (
    `case when ${value} is null then 'inf'::double ` +
    `when isfinite(${number}) then ${number} else 'nan'::double end`
  );
}

/**
 * Index into `levels` as a double, or a mark: text compared exactly, and by number where both are numbers.
 *
 * @param enumName an ENUM type that holds `levels` in their order
 */
export function levelsSql(column: RelationColumn, levels: readonly string[], enumName: string): string {
  const text = textSql(column);
  const byNumber = levels
    .map((level, code) => (isNumberText(level) ? ` when '${Number(level)}'::double then ${code}` : ''))
    .join('');
  const numeric = byNumber === '' ? '' : `(case ${doubleSql(column)}${byNumber} end)::double, `;
  return (
    `case when ${text} is null then ${MARK.levelMissing}::double else ` +
    `coalesce(enum_code(try_cast(${text} as ${enumName}))::double, ${numeric}${MARK.levelUnknown}::double) end`
  );
}

export const createEnumSql = (enumName: string, levels: readonly string[]): string =>
  `create type ${enumName} as enum (${levels.map(sqlText).join(', ')})`;

/**
 * The value as a label, null where missing: text as it is, but numbers by value, so that 1, 1.0 and 01 are one label. Numbers
 * that doubles do not tell apart stay text.
 */
export function labelSql(column: RelationColumn): string {
  const number = doubleSql(column);
  const text = textSql(column);
  return `case when abs(${number}) <= ${Number.MAX_SAFE_INTEGER} then cast(${number} + 0.0 as varchar) else ${text} end`;
}

/** Makes the ENUM type of all labels of a column; their order is that of the type's codes. */
export const createLabelEnumSql = (enumName: string, column: RelationColumn, from: string): string =>
  `create type ${enumName} as enum (select distinct label from (select ${labelSql(column)} as label from ${from}) where label is not null)`;

/** Code of the label as a double, or `MARK.levelMissing`. */
export const labelCodeSql = (column: RelationColumn, enumName: string): string =>
  `coalesce(enum_code(try_cast(${labelSql(column)} as ${enumName}))::double, ${MARK.levelMissing}::double)`;

const isNumberText = (text: string): boolean =>
  /^[+-]?(\d+\.?\d*|\.\d+)(e[+-]?\d+)?$/i.test(text) && Number.isFinite(Number(text));
