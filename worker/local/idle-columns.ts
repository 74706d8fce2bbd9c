import type { Occupied } from '../design/rows.js';
import type { ProximalProblem } from './newton.js';

/**
 * A proximal problem without the columns that are idle at this site. The rows see the idle θ_j only through the sum
 * t = Σ v_j θ_j, v_j the number that column j is in every row; the nearest such θ to the centre is
 * c_j + v_j / m_j · (t − t_c) / Σ v²/m. So t is a coefficient of a column of ones, with the metric 1 / Σ v²/m.
 */
export interface WithoutIdle {
  readonly problem: ProximalProblem;
  /** The point of all columns. */
  whole(point: Float64Array): Float64Array;
  /** Of a step from one such point to another. */
  wholeStep(step: Float64Array): Float64Array;
}

/** Null where no columns are set apart, or an idle one is not held. */
export function withoutIdle(problem: ProximalProblem): WithoutIdle | null {
  const { shard, metric, center, start } = problem;
  const occupied = shard.rows.occupied?.() ?? null;
  if (occupied === null) return null;
  const { columns, idle, rows, shifting } = occupied;
  if (!idle.columns.every((j) => metric[j] > 0)) return null;
  let give = 0;
  for (let i = 0; i < idle.columns.length; i++)
    give += (idle.values[i] * idle.values[i]) / metric[idle.columns[i]];
  const spread = (inner: Float64Array, from: Float64Array, moved: number): Float64Array => {
    const out = Float64Array.from(from);
    for (let k = 0; k < columns.length; k++) out[columns[k]] = inner[k];
    if (!shifting) return out;
    for (let i = 0; i < idle.columns.length; i++) {
      const j = idle.columns[i];
      out[j] += ((idle.values[i] / metric[j]) * moved) / give;
    }
    return out;
  };
  const sum = idleSum(center, occupied);
  const none = new Float64Array(shard.p);
  return {
    problem: {
      ...problem,
      shard: { ...shard, p: rows.p, rows },
      metric: gathered(metric, occupied, 1 / give),
      center: gathered(center, occupied, sum),
      start: gathered(start, occupied, idleSum(start, occupied)),
    },
    whole: (point) => spread(point, center, point[columns.length] - sum),
    wholeStep: (step) => spread(step, none, step[columns.length]),
  };
}

/** The entries of the columns that are not idle and, where there is a column of ones, its own. */
function gathered(values: Float64Array, { columns, shifting }: Occupied, ones: number): Float64Array {
  const out = new Float64Array(columns.length + (shifting ? 1 : 0));
  for (let k = 0; k < columns.length; k++) out[k] = values[columns[k]];
  if (shifting) out[columns.length] = ones;
  return out;
}

function idleSum(values: Float64Array, { idle }: Occupied): number {
  let sum = 0;
  for (let i = 0; i < idle.columns.length; i++) sum += idle.values[i] * values[idle.columns[i]];
  return sum;
}
