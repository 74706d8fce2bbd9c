import type { DesignColumn, Transform } from '../../protocol/specification/types.js';
import type { LevelColumn, Table } from '../source/table.js';
import { numericColumn } from './response.js';

// rows filled at a time, so that writes to the row-major matrix stay in cache
const blockRows = 256;

type Factor = DesignColumn['factors'][number];
type NumericFactor = Extract<Factor, { kind: 'numeric' }>;
type FactorValues = { readonly kind: 'values'; readonly values: Float64Array } | Indicator;
interface Indicator {
  readonly kind: 'indicator';
  readonly codes: Int32Array;
  readonly code: number;
}

/** Every distinct factor of a design once, over the rows of a table. */
export type FactorsByKey = ReadonlyMap<string, FactorValues>;

const keyOf = (factor: Factor): string =>
  JSON.stringify(
    factor.kind === 'numeric'
      ? ['numeric', factor.column, factor.transform]
      : ['level', factor.column, factor.level],
  );

/** A transform that is not defined at a value gives a number that is not finite there. */
export function factorValues(
  columns: readonly DesignColumn[],
  table: Table,
  numeric = new TransformedColumns(table),
): FactorsByKey {
  const found = new Map<string, FactorValues>();
  for (const factor of columns.flatMap((column) => column.factors)) {
    const key = keyOf(factor);
    if (found.has(key)) continue;
    if (factor.kind === 'level') {
      const { levels, codes } = levelColumn(table, factor.column);
      found.set(key, { kind: 'indicator', codes, code: levels.indexOf(factor.level) });
    } else {
      found.set(key, { kind: 'values', values: numeric.of(factor) });
    }
  }
  return found;
}

/** The numeric columns of a table as some terms transform them, each once. */
export class TransformedColumns {
  readonly #made = new Map<string, Float64Array>();

  constructor(private readonly table: Table) {}

  of({ column, transform }: Pick<NumericFactor, 'column' | 'transform'>): Float64Array {
    const key = keyOf({ kind: 'numeric', column, transform });
    const values = this.#made.get(key) ?? transformed(numericColumn(this.table, column), transform);
    this.#made.set(key, values);
    return values;
  }
}

/** Not finite where the transform is not defined or too large. */
export function transformed(values: Float64Array, transform: Transform): Float64Array {
  if (transform === 'none') return values;
  if (transform === 'log') return values.map(Math.log);
  if (transform === 'sqrt') return values.map(Math.sqrt);
  const { power } = transform;
  return values.map((value) => value ** power);
}

/** Derivative of `transformed` by the value, element by element; not finite where it is not defined. */
export function transformSlopes(values: Float64Array, transform: Transform): Float64Array {
  if (transform === 'none') return new Float64Array(values.length).fill(1);
  if (transform === 'log') return values.map((value) => 1 / value);
  if (transform === 'sqrt') return values.map((value) => 0.5 / Math.sqrt(value));
  const { power } = transform;
  return values.map((value) => power * value ** (power - 1));
}

/**
 * Derivative of each design column by the numeric column `name` as it is in the table, rows × columns, row-major: the
 * product rule over its factors.
 */
export function designSlopes(columns: readonly DesignColumn[], name: string, table: Table): Float64Array {
  const p = columns.length;
  const out = new Float64Array(table.rowCount * p);
  columns.forEach(({ name: label, term, factors }, j) => {
    factors.forEach((factor, at) => {
      if (factor.kind !== 'numeric' || factor.column !== name) return;
      const others = { name: label, term, factors: factors.filter((_, other) => other !== at) };
      const product = new Float64Array(table.rowCount);
      fillDesign(product, [others], factorValues([others], table), table.rowCount);
      const slopes = transformSlopes(numericColumn(table, name), factor.transform);
      for (let row = 0; row < table.rowCount; row++) out[row * p + j] += product[row] * slopes[row];
    });
  });
  return out;
}

/** Writes the design, rows × columns, row-major: each column the product of its factors. */
export function fillDesign(
  x: Float64Array,
  columns: readonly DesignColumn[],
  factors: FactorsByKey,
  rowCount: number,
): void {
  const p = columns.length;
  const factorsByColumn = columns.map((column) =>
    column.factors.map((factor) => {
      const values = factors.get(keyOf(factor));
      if (values === undefined) throw new Error(`no values for the factor ${keyOf(factor)}`);
      return values;
    }),
  );
  for (let start = 0; start < rowCount; start += blockRows) {
    const end = Math.min(start + blockRows, rowCount);
    factorsByColumn.forEach((list, j) => {
      const numeric = list.filter((factor) => factor.kind === 'values');
      const [first, ...others] = numeric;
      if (first === undefined) for (let row = start; row < end; row++) x[row * p + j] = 1;
      else for (let row = start; row < end; row++) x[row * p + j] = first.values[row];
      for (const { values } of others) for (let row = start; row < end; row++) x[row * p + j] *= values[row];
      // after the products, so that a row of another level holds 0 and never −0
      for (const factor of list) {
        if (factor.kind === 'indicator')
          for (let row = start; row < end; row++) if (factor.codes[row] !== factor.code) x[row * p + j] = 0;
      }
    });
  }
}

export function levelColumn(table: Table, column: string): LevelColumn {
  const values = table.levels.get(column);
  if (values === undefined) throw new Error(`the table was read without the levels column ${column}`);
  return values;
}
