import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { FitSpecification, LossKind } from '../../protocol/specification/types.js';
import type { Table } from '../source/table.js';
import type { RawShard } from './shard.js';
import { OFFSET_MOST, VALUE_MOST } from './value-limit.js';

/** Response, weights and offset: one number a row each. Failures as `buildRawShard` lists them. */
export function responseOf(
  spec: FitSpecification,
  table: Table,
): Checked<Pick<RawShard, 'y' | 'weights' | 'offset'>> {
  const y = responseValues(spec, table);
  if (!y.ok) return y;
  const weights = spec.weights === null ? succeed(null) : weightValues(spec.weights.column, table);
  if (!weights.ok) return weights;
  const offset = spec.offset === null ? succeed(null) : offsetValues(spec.offset, table);
  if (!offset.ok) return offset;
  return succeed({ y: y.value, weights: weights.value, offset: offset.value });
}

function responseValues(spec: FitSpecification, table: Table): Checked<Float64Array> {
  const { column, positive } = spec.response;
  const { kind } = spec.loss;
  if (positive !== null) {
    const read = table.levels.get(column);
    if (read === undefined) throw new Error(`the table was read without the levels column ${column}`);
    const code = read.levels.indexOf(positive);
    return succeed(Float64Array.from(read.codes, (other) => (other === code ? 1 : 0)));
  }
  const y = numericColumn(table, column);
  const anyNumber = {
    fits: (value: number) => Math.abs(value) <= VALUE_MOST,
    text: `a number of size ${VALUE_MOST} at most`,
  };
  const allowed: Readonly<Record<LossKind, { fits: (value: number) => boolean; text: string }>> = {
    squared: anyNumber,
    huber: anyNumber,
    logistic: { fits: (value) => value === 0 || value === 1, text: '0 or 1' },
    poisson: {
      fits: (value) => value >= 0 && value <= VALUE_MOST,
      text: `zero or more, ${VALUE_MOST} at most`,
    },
  };
  const { fits, text } = allowed[kind];
  const row = y.findIndex((value) => !fits(value));
  if (row < 0) return succeed(y);
  return fail(
    'response-range',
    `The response ${y[row]} does not suit the loss ${kind}, which takes ${text}.`,
    {
      where: { row: sourceRow(table, row), column },
      remedy:
        kind === 'logistic'
          ? 'Correct the value, or name the class that counts with `response: {column: …, positive: …}`.'
          : 'Correct the value, or choose another loss.',
    },
  );
}

function weightValues(column: string, table: Table): Checked<Float64Array> {
  const weights = numericColumn(table, column);
  const negative = weights.findIndex((weight) => weight < 0);
  if (negative >= 0)
    return fail('weight-negative', `The weight ${weights[negative]} is negative.`, {
      where: { row: sourceRow(table, negative), column },
      remedy: 'Weights are zero or more; a row with weight zero does not count.',
    });
  const large = weights.findIndex((weight) => weight > VALUE_MOST);
  return large < 0
    ? succeed(weights)
    : outOfReach(weights[large], VALUE_MOST, 'weight', table, large, column);
}

function offsetValues(offset: NonNullable<FitSpecification['offset']>, table: Table): Checked<Float64Array> {
  const { column, kind } = offset;
  const values = numericColumn(table, column);
  if (kind === 'offset') {
    const far = values.findIndex((value) => Math.abs(value) > OFFSET_MOST);
    return far < 0 ? succeed(values) : outOfReach(values[far], OFFSET_MOST, 'offset', table, far, column);
  }
  const row = values.findIndex((exposure) => exposure <= 0);
  if (row >= 0)
    return fail('exposure-not-positive', `The exposure ${values[row]} is not above zero.`, {
      where: { row: sourceRow(table, row), column },
      remedy: 'Leave out rows that were not observed for any time, or correct the exposure.',
    });
  const logs = values.map(Math.log);
  const far = logs.findIndex((value) => Math.abs(value) > OFFSET_MOST);
  return far < 0 ? succeed(logs) : outOfReach(logs[far], OFFSET_MOST, 'offset', table, far, column);
}

const outOfReach = (
  value: number,
  most: number,
  what: string,
  table: Table,
  row: number,
  column: string,
): ReturnType<typeof fail> =>
  fail('value-not-finite', `The ${what} ${value} is beyond ${most} in size, too large to compute with.`, {
    where: { row: sourceRow(table, row), column },
    remedy: 'Correct the value, or give the column in another unit.',
  });

/** 1-based data row in the source. */
export const sourceRow = (table: Pick<Table, 'rowNumbers'>, row: number): number =>
  table.rowNumbers?.[row] ?? row + 1;

export function numericColumn(table: Table, column: string): Float64Array {
  const values = table.numeric.get(column);
  if (values === undefined) throw new Error(`the table was read without the numeric column ${column}`);
  return values;
}
