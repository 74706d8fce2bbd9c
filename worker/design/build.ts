import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { DesignColumn, FitSpecification, Transform } from '../../protocol/specification/types.js';
import type { LevelColumn, Table } from '../source/table.js';
import { factorsOf } from './request.js';
import { numericColumn, responseOf, sourceRow } from './response.js';
import type { RawShard } from './shard.js';
import { VALUE_MOST } from './value-limit.js';

// rows filled at a time, so that writes to the row-major matrix stay in cache
const blockRows = 256;

/**
 * The design of one shard: columns as `designColumns` orders them, without intercept, as the specification defines them.
 *
 * Fails with `no-rows`, `value-not-finite` (a transform that is not defined or too large), `level-unknown` (a level that
 * one of two terms on a column does not list), `response-range`, `exposure-not-positive`, `weight-negative`; the rows
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
  const columns = designColumns(spec);
  const factors = factorValues(columns, table);
  if (!factors.ok) return factors;
  const x = new Float64Array(table.rowCount * columns.length);
  fill(x, columns, factors.value, table);
  const overflow = tooLarge(x, columns, table);
  if (overflow !== null) return overflow;
  return succeed({
    rowCount: table.rowCount,
    rowsDropped: table.rowsDropped,
    columns: columns.map((column) => column.name),
    x,
    ...response.value,
  });
}

type Factor = DesignColumn['factors'][number];
type FactorValues = { readonly kind: 'values'; readonly values: Float64Array } | Indicator;
interface Indicator {
  readonly kind: 'indicator';
  readonly codes: Int32Array;
  readonly code: number;
}

const keyOf = (factor: Factor): string =>
  JSON.stringify(
    factor.kind === 'numeric'
      ? ['numeric', factor.column, factor.transform]
      : ['level', factor.column, factor.level],
  );

/** Every distinct factor once, by its key. */
function factorValues(columns: readonly DesignColumn[], table: Table): Checked<Map<string, FactorValues>> {
  const found = new Map<string, FactorValues>();
  for (const factor of columns.flatMap((column) => column.factors)) {
    const key = keyOf(factor);
    if (found.has(key)) continue;
    if (factor.kind === 'level') {
      const { levels, codes } = levelColumn(table, factor.column);
      found.set(key, { kind: 'indicator', codes, code: levels.indexOf(factor.level) });
      continue;
    }
    const values = transformed(factor.column, factor.transform, table);
    if (!values.ok) return values;
    found.set(key, { kind: 'values', values: values.value });
  }
  return succeed(found);
}

function transformed(column: string, transform: Transform, table: Table): Checked<Float64Array> {
  const values = numericColumn(table, column);
  if (transform === 'none') return succeed(values);
  const apply = functionOf(transform);
  const out = new Float64Array(values.length);
  for (let row = 0; row < values.length; row++) {
    const value = apply(values[row]);
    if (!Number.isFinite(value)) {
      const name = typeof transform === 'string' ? transform : `power ${transform.power}`;
      return fail('value-not-finite', `The transform ${name} of the value ${values[row]} is not finite.`, {
        where: { row: sourceRow(table, row), column },
        remedy: 'Correct the value, or use the column without this transform.',
      });
    }
    out[row] = value;
  }
  return succeed(out);
}

function functionOf(transform: Exclude<Transform, 'none'>): (value: number) => number {
  if (transform === 'log') return Math.log;
  if (transform === 'sqrt') return Math.sqrt;
  const { power } = transform;
  return (value) => value ** power;
}

function fill(
  x: Float64Array,
  columns: readonly DesignColumn[],
  factors: ReadonlyMap<string, FactorValues>,
  table: Table,
): void {
  const p = columns.length;
  const factorsByColumn = columns.map((column) =>
    column.factors.map((factor) => {
      const values = factors.get(keyOf(factor));
      if (values === undefined) throw new Error(`no values for the factor ${keyOf(factor)}`);
      return values;
    }),
  );
  for (let start = 0; start < table.rowCount; start += blockRows) {
    const end = Math.min(start + blockRows, table.rowCount);
    factorsByColumn.forEach((list, j) => {
      for (let row = start; row < end; row++) x[row * p + j] = 1;
      for (const factor of list) {
        if (factor.kind === 'values')
          for (let row = start; row < end; row++) x[row * p + j] *= factor.values[row];
      }
      // after the products, so that a row of another level holds 0 and never −0
      for (const factor of list) {
        if (factor.kind === 'indicator')
          for (let row = start; row < end; row++) if (factor.codes[row] !== factor.code) x[row * p + j] = 0;
      }
    });
  }
}

function tooLarge(
  x: Float64Array,
  columns: readonly DesignColumn[],
  table: Table,
): ReturnType<typeof fail> | null {
  const at = x.findIndex((value) => !(Math.abs(value) <= VALUE_MOST));
  if (at < 0) return null;
  return fail('value-not-finite', `The value ${x[at]} is larger than ${VALUE_MOST}, too large to square.`, {
    where: {
      row: sourceRow(table, Math.floor(at / columns.length)),
      column: columns[at % columns.length].name,
    },
    remedy: 'Correct the value, or give the column in a larger unit.',
  });
}

/** The first row whose level is in the table's list but not in that of a term: the term would take it for its baseline. */
function unlistedLevel(spec: FitSpecification, table: Table): ReturnType<typeof fail> | null {
  for (const term of factorsOf(spec)) {
    if (term.kind !== 'levels') continue;
    const { levels, codes } = levelColumn(table, term.column);
    const listed = levels.map((level) => term.levels.includes(level));
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

function levelColumn(table: Table, column: string): LevelColumn {
  const values = table.levels.get(column);
  if (values === undefined) throw new Error(`the table was read without the levels column ${column}`);
  return values;
}
