import { addScaled, allFinite } from '../../numerics/vector.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { MarginsAnswer, MarginsWork } from '../../protocol/messages/margins.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { DesignColumn } from '../../protocol/specification/types.js';
import { designSlopes, factorValues, fillDesign } from '../design/factors.js';
import type { MarginColumns } from '../design/shard.js';
import type { Table } from '../source/table.js';
import { type AtPoint, atPoint, byCoefficients } from './at-point.js';
import { notFinite } from './failures.js';
import type { PartSolvers } from './part-solvers.js';

type Setting = MarginsWork['settings'][number];
type Sum = MarginsAnswer['settings'][number];

/** Rows whose design is made anew at a time. */
const BLOCK_ROWS = 512;

/** A solver column that a setting changes: its place in the shard, and how it is scaled. */
interface Changed {
  readonly column: DesignColumn;
  readonly place: number;
  readonly center: number;
  readonly scale: number;
}

/**
 * Mean predictions with a column set to something else in every row: Σ μ and Σ ∂μ/∂θ at a level, or the same of the
 * derivative of μ by a numeric column. A level changes every term and product of that column, a slope every transform of
 * it; offsets stay. Yields between settings. Fails with `not-supported` where the specification asks for no margins or has
 * no such term, `level-unknown`, `number-not-finite` (a transform without a derivative at some row).
 */
export function* margins(
  parts: PartSolvers,
  made: MarginColumns | null,
  scaling: Scaling,
  work: MarginsWork,
): Generator<void, Checked<MarginsAnswer>> {
  if (made === null)
    return fail('not-supported', 'The specification asks for no margins.', {
      remedy: 'Add `margins` to its `report`.',
    });
  const at = atPoint(parts, work.point);
  if (!at.ok) return at;
  const lead = at.value.shard.p - scaling.kept.length;
  const settings: Sum[] = [];
  for (const setting of work.settings) {
    yield;
    const changed = changedBy(setting, made, scaling, lead);
    if (!changed.ok) return changed;
    const { sum, gradient } =
      setting.set === 'level'
        ? levelSum(at.value, made, changed.value, setting)
        : slopeSum(at.value, made, changed.value, setting.column);
    if (!Number.isFinite(sum) || !allFinite(gradient)) return notFinite(`The margin of ${setting.column}`);
    settings.push({ sum, gradient: byCoefficients(at.value, gradient) });
  }
  return succeed({ work: 'margins', problem: work.problem, rows: parts.whole.rowCount, settings });
}

function changedBy(
  setting: Setting,
  { columns, levels, numeric }: MarginColumns,
  scaling: Scaling,
  lead: number,
): Checked<Changed[]> {
  const { column } = setting;
  const where = { column };
  const known = setting.set === 'level' ? levels.has(column) : numeric.has(column);
  if (!known)
    return fail('not-supported', `The specification has no term to set the column ${column} in.`, { where });
  if (setting.set === 'level' && !levels.get(column)?.levels.includes(setting.level))
    return fail('level-unknown', `"${setting.level}" is no level of the column.`, { where });
  const kind = setting.set === 'level' ? 'level' : 'numeric';
  return succeed(
    scaling.kept.flatMap((index, k): Changed[] => {
      const made = columns[index];
      const holds = made.factors.some((factor) => factor.kind === kind && factor.column === column);
      const { center, scale } = scaling;
      return holds ? [{ column: made, place: lead + k, center: center[k], scale: scale[k] }] : [];
    }),
  );
}

function levelSum(
  { shard, loss, point }: AtPoint,
  made: MarginColumns,
  changed: readonly Changed[],
  { column, level }: Extract<Setting, { set: 'level' }>,
): Sum {
  const { p, rowCount } = shard;
  const { kernel } = shard.rows;
  const gradient = new Float64Array(p);
  let sum = 0;
  const code = made.levels.get(column)?.levels.indexOf(level) ?? -1;
  const columns = changed.map((one) => one.column);
  for (let from = 0; from < rowCount; from += BLOCK_ROWS) {
    const to = Math.min(from + BLOCK_ROWS, rowCount);
    const rows = to - from;
    const table = tableOf(made, from, to, { column, code });
    const design = new Float64Array(rows * columns.length);
    fillDesign(design, columns, factorValues(columns, table), rows);
    const x = new Float64Array(rows * p);
    shard.rows.copy(from, to, x);
    changed.forEach(({ place, center, scale }, k) => {
      for (let r = 0; r < rows; r++) x[r * p + place] = (design[r * columns.length + k] - center) / scale;
    });
    const eta = new Float64Array(rows);
    kernel.rowProducts(x, p, 0, rows, point, eta);
    for (let r = 0; r < rows; r++) {
      if (shard.offset !== null) eta[r] += shard.offset[from + r];
      sum += loss.mean(eta[r]);
      eta[r] = loss.meanSlope(eta[r]);
    }
    kernel.addWeightedRows(x, p, 0, rows, eta, gradient);
  }
  return { sum, gradient };
}

/** With d = ∂x_r/∂(column) in solver columns: Σ μ′ · dθ, and its derivative by θ, Σ μ″ (dθ) x_r + μ′ d. */
function slopeSum(
  { shard, loss, point, rows: { eta } }: AtPoint,
  made: MarginColumns,
  changed: readonly Changed[],
  column: string,
): Sum {
  const { p, rowCount } = shard;
  const gradient = new Float64Array(p);
  let sum = 0;
  const columns = changed.map((one) => one.column);
  const width = columns.length;
  for (let from = 0; from < rowCount; from += BLOCK_ROWS) {
    const to = Math.min(from + BLOCK_ROWS, rowCount);
    const slopes = designSlopes(columns, column, tableOf(made, from, to, null));
    const bends = new Float64Array(to - from);
    const direct = new Float64Array(p);
    for (let r = from; r < to; r++) {
      const meanSlope = loss.meanSlope(eta[r]);
      let along = 0;
      changed.forEach(({ place, scale }, k) => {
        const d = slopes[(r - from) * width + k] / scale;
        along += d * point[place];
        direct[place] += meanSlope * d;
      });
      sum += meanSlope * along;
      bends[r - from] = loss.meanBend(eta[r]) * along;
    }
    shard.rows.addWeighted(from, to, bends, gradient);
    addScaled(gradient, 1, direct);
  }
  return { sum, gradient };
}

/** Rows of the table, with one column of levels at one level throughout. */
function tableOf(
  { numeric, levels }: MarginColumns,
  from: number,
  to: number,
  set: { readonly column: string; readonly code: number } | null,
): Table {
  const rowCount = to - from;
  return {
    rowCount,
    rowsDropped: 0,
    numeric: new Map([...numeric].map(([name, values]) => [name, values.subarray(from, to)])),
    levels: new Map(
      [...levels].map(([name, { levels: list, codes }]) => [
        name,
        {
          levels: list,
          codes: name === set?.column ? new Int32Array(rowCount).fill(set.code) : codes.subarray(from, to),
        },
      ]),
    ),
  };
}
