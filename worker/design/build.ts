import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { designColumnNames, designColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { LevelColumn, Table } from '../source/table.js';
import { RawDenseRows } from './dense-rows.js';
import { factorValues, fillDesign, levelColumn, TransformedColumns } from './factors.js';
import { clustersOf, foldsOf } from './folds.js';
import { groupedByFold } from './group-rows.js';
import { RawSparseRows } from './raw-sparse-rows.js';
import { factorsOf } from './request.js';
import { numericColumn, responseOf, sourceRow } from './response.js';
import type { MarginColumns, RawShard } from './shard.js';
import { isSparse, sparseEntries } from './sparse-build.js';
import { VALUE_MOST } from './value-limit.js';

/**
 * The design of one shard: columns as `designColumns` orders them, without intercept, as the specification defines them;
 * rows in table order, or fold after fold where there is a cross-validation.
 *
 * Fails with `no-rows`, `value-not-finite` (a transform that is not defined or too large), `level-unknown` (a level that
 * one of two terms on a column does not list), `response-range`, `exposure-not-positive`, `weight-negative`,
 * `rows-too-few` and `field-value` (folds that these rows do not make); the rows
 * named are those of the source.
 */
export function buildRawShard(spec: FitSpecification, table: Table): Checked<RawShard> {
  if (table.rowCount === 0)
    return fail('no-rows', `No row is left to use; ${table.rowsDropped} were left out for missing values.`, {
      remedy: 'Check the used columns of this table for missing values, and the shard of the site file.',
    });
  const foreign = unlistedLevel(spec, table);
  if (foreign !== null) return foreign;
  const response = responseOf(spec, table);
  if (!response.ok) return response;
  const numeric = new TransformedColumns(table);
  const undefinedAt = notFiniteTransform(spec, numeric, table);
  if (undefinedAt !== null) return undefinedAt;
  const columns = designColumnNames(spec);
  const rows = isSparse(spec.terms)
    ? sparseRows(spec, columns, numeric, table)
    : denseRows(spec, numeric, table);
  if (!rows.ok) return rows;
  const folds = foldsOf(spec, table);
  if (!folds.ok) return folds;
  const clusters = clustersOf(spec, table);
  const raw: RawShard = {
    rowCount: table.rowCount,
    rowsDropped: table.rowsDropped,
    columns,
    rows: rows.value,
    ...response.value,
    folds: null,
    clusters: clusters === null ? null : { count: clusters.labels.length, ofRow: clusters.ofRow },
    margins: spec.report.margins ? marginColumns(spec, table) : null,
  };
  return succeed(folds.value === null ? raw : groupedByFold(raw, folds.value));
}

/** The columns of the terms alone. */
function marginColumns(spec: FitSpecification, table: Table): MarginColumns {
  const numeric = new Map<string, Float64Array>();
  const levels = new Map<string, LevelColumn>();
  for (const { kind, column } of factorsOf(spec)) {
    if (kind === 'numeric') numeric.set(column, numericColumn(table, column));
    else levels.set(column, levelColumn(table, column));
  }
  return { columns: designColumns(spec), numeric, levels };
}

/** The first value that a transform of the specification is not finite at. */
function notFiniteTransform(
  spec: FitSpecification,
  numeric: TransformedColumns,
  table: Table,
): ReturnType<typeof fail> | null {
  for (const factor of factorsOf(spec)) {
    if (factor.kind === 'levels' || factor.transform === 'none') continue;
    const { column, transform } = factor;
    const row = numeric.of(factor).findIndex((value) => !Number.isFinite(value));
    if (row < 0) continue;
    const name = typeof transform === 'string' ? transform : `power ${transform.power}`;
    return fail(
      'value-not-finite',
      `The transform ${name} of the value ${numericColumn(table, column)[row]} is not finite.`,
      {
        where: { row: sourceRow(table, row), column },
        remedy: 'Correct the value, or use the column without this transform.',
      },
    );
  }
  return null;
}

function denseRows(spec: FitSpecification, numeric: TransformedColumns, table: Table): Checked<RawDenseRows> {
  const columns = designColumns(spec);
  const p = columns.length;
  const x = new Float64Array(table.rowCount * p);
  fillDesign(x, columns, factorValues(columns, table, numeric), table.rowCount);
  const at = x.findIndex(isTooLarge);
  if (at >= 0) return tooLarge(x[at], Math.floor(at / p), columns[at % p].name, table);
  return succeed(new RawDenseRows(x, p, table.rowCount));
}

function sparseRows(
  spec: FitSpecification,
  names: readonly string[],
  numeric: TransformedColumns,
  table: Table,
): Checked<RawSparseRows> {
  const entries = sparseEntries(spec.terms, numeric, table);
  const at = entries.values.findIndex(isTooLarge);
  if (at < 0) return succeed(new RawSparseRows(entries, names.length));
  const row = entries.starts.findIndex((_, r) => entries.starts[r + 1] > at);
  return tooLarge(entries.values[at], row, names[entries.columns[at]], table);
}

const isTooLarge = (value: number): boolean => !(Math.abs(value) <= VALUE_MOST);

const tooLarge = (value: number, row: number, column: string, table: Table): ReturnType<typeof fail> =>
  fail('value-not-finite', `The value ${value} is larger than ${VALUE_MOST}, too large to square.`, {
    where: { row: sourceRow(table, row), column },
    remedy: 'Correct the value, or give the column in a larger unit.',
  });

/** The first row whose level is in the table's list but not in that of a term: the term would take it for its baseline. */
function unlistedLevel(spec: FitSpecification, table: Table): ReturnType<typeof fail> | null {
  for (const term of factorsOf(spec)) {
    if (term.kind !== 'levels') continue;
    const { levels, codes } = levelColumn(table, term.column);
    const known = new Set(term.levels);
    const listed = levels.map((level) => known.has(level));
    if (listed.every(Boolean)) continue;
    const row = codes.findIndex((code) => !listed[code]);
    if (row < 0) continue;
    return fail(
      'level-unknown',
      `The value "${levels[codes[row]]}" is not a level of the term "${term.name}".`,
      {
        where: { row: sourceRow(table, row), column: term.column },
        remedy: 'Give every term on this column the same levels.',
      },
    );
  }
  return null;
}
