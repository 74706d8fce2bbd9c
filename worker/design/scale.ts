import type { Scaling } from '../../protocol/messages/run.js';
import type { RawShard, Shard } from './shard.js';

/**
 * Design columns to solver columns: ones for the intercept where the model has one, then (x − center) / scale of each
 * column kept. `scaling.kept`, `center` and `scale` run in parallel.
 */
export function scaleShard(raw: RawShard, scaling: Scaling, intercept: boolean): Shard {
  const { kept, center, scale } = scaling;
  const lead = intercept ? 1 : 0;
  const p = lead + kept.length;
  const width = raw.columns.length;
  const x = new Float64Array(raw.rowCount * p);
  for (let row = 0; row < raw.rowCount; row++) {
    const from = row * width;
    const to = row * p;
    if (intercept) x[to] = 1;
    for (let j = 0; j < kept.length; j++) x[to + lead + j] = (raw.x[from + kept[j]] - center[j]) / scale[j];
  }
  return {
    rowCount: raw.rowCount,
    p,
    x,
    y: raw.y,
    weights: raw.weights,
    offset: raw.offset,
    rowCountTotal: scaling.rowCountTotal,
  };
}
