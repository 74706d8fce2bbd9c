import type {
  FitSpecification,
  LevelsTerm,
  NumericTerm,
  Transform,
} from '../../protocol/specification/types.js';
import type { LevelColumn, Table } from '../../worker/source/table.js';
import { NO_REPORT } from './specifications.js';

/** A specification that is sound by itself; tests change what they are about. */
export const specification = (partial: Partial<FitSpecification>): FitSpecification => ({
  title: 'test',
  sites: ['harrowmere'],
  missing: 'refuse',
  response: { column: 'y', positive: null },
  loss: { kind: 'squared' },
  offset: null,
  weights: null,
  intercept: 'shared',
  terms: [],
  penalties: [],
  choose: null,
  report: NO_REPORT,
  rounds: { tolerance: 1e-8, most: 300, rung: 'highest' },
  barrier: { deadlineMs: 1000, quorum: 'all', oldest: 0, patienceMs: 1000, missing: 'stop' },
  ...partial,
});

export const numericTerm = (column: string, transform: Transform = 'none'): NumericTerm => ({
  kind: 'numeric',
  column,
  unit: null,
  transform,
  name: typeof transform === 'object' ? `${column}^${transform.power}` : column,
});

export const levelsTerm = (
  column: string,
  levels: readonly string[],
  baseline: string | null,
): LevelsTerm => ({
  kind: 'levels',
  column,
  levels,
  baseline,
  name: column,
});

/** A table from columns of numbers and of level codes. */
export function table(
  numeric: Readonly<Record<string, readonly number[]>>,
  levels: Readonly<Record<string, LevelColumn>> = {},
  rowNumbers?: readonly number[],
): Table {
  const columns = new Map(Object.entries(numeric).map(([name, values]) => [name, Float64Array.from(values)]));
  const coded = new Map(Object.entries(levels));
  const rowCount = [...columns.values()][0]?.length ?? [...coded.values()][0]?.codes.length ?? 0;
  return {
    rowCount,
    rowsDropped: 0,
    ...(rowNumbers === undefined ? {} : { rowNumbers: Uint32Array.from(rowNumbers) }),
    numeric: columns,
    levels: coded,
  };
}
