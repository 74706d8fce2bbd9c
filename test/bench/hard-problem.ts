import { noPenalty, type Penalty } from '../../numerics/penalty.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import type { LossKind } from '../../protocol/specification/types.js';
import { denseShard } from '../../worker/design/dense-rows.js';
import {
  type BenchProblem,
  drawColumns,
  drawResponse,
  interceptOnly,
  linearPredictor,
  type SplitKind,
  seedOf,
  splitRows,
  standardised,
  takeRows,
} from './problems.js';

/** What makes a problem hard; everything else has its default. */
export interface Hardship {
  readonly loss: LossKind;
  readonly rows?: number;
  readonly columns?: number;
  readonly correlation?: number;
  readonly sites?: number;
  readonly split?: SplitKind;
  /** Rows of each site, in place of `split`: they add up to `rows`. */
  readonly siteRows?: readonly number[];
  /** Size of the effects. */
  readonly effects?: number;
  readonly penalty?: Partial<Record<'l1' | 'l2', number>> & { readonly box?: readonly [number, number] };
  /** Changes the columns before they are standardised (row-major rows × columns). */
  readonly columnsTo?: (raw: Float64Array, rows: number, columns: number) => void;
  /** Changes response and offset. */
  readonly responseTo?: (drawn: Drawn, random: Random) => void;
}

export interface Drawn {
  readonly x: Float64Array;
  readonly p: number;
  readonly eta: Float64Array;
  readonly y: Float64Array;
  readonly offset: Float64Array | null;
}

/** The problem of that name and hardship, from its own seed, the name's. */
export function makeHardProblem(name: string, hardship: Hardship): BenchProblem {
  const { loss, rows = 240, columns = 8, sites = 4, siteRows, split = 'random' } = hardship;
  const random = seededRandom(seedOf(name));
  const raw = drawColumns(random, { rows, columns, correlation: hardship.correlation ?? 0.3 }, 'well');
  hardship.columnsTo?.(raw, rows, columns);
  const x = standardised(raw, rows, columns);
  const p = columns + 1;
  const size = (hardship.effects ?? 1) / Math.sqrt(Math.min(columns, 10));
  const truth = Float64Array.from({ length: columns }, () => size * random.normal());
  const eta = linearPredictor(x, rows, p, truth);
  const { y, offset } = drawResponse(random, loss, eta);
  hardship.responseTo?.({ x, p, eta, y, offset }, random);
  const pooled = denseShard({ rowCount: rows, p, x, y, weights: null, offset, rowCountTotal: rows });
  const parts = siteRows === undefined ? splitRows(random, split, sites, y, x, p) : consecutive(siteRows);
  return {
    name,
    loss,
    p,
    pooled,
    shards: parts.filter((part) => part.length > 0).map((part) => takeRows(pooled, part)),
    penalty: penaltyOf(hardship.penalty ?? {}, p),
    start: interceptOnly(loss, y, offset, p),
  };
}

function consecutive(siteRows: readonly number[]): Int32Array[] {
  let from = 0;
  return siteRows.map((count) => {
    const first = from;
    from += count;
    return Int32Array.from({ length: count }, (_, k) => first + k);
  });
}

function penaltyOf({ l1 = 0, l2 = 0, box }: NonNullable<Hardship['penalty']>, p: number): Penalty {
  const penalty = noPenalty(p);
  penalty.l1.fill(l1, 1);
  penalty.l2.fill(l2, 1);
  if (box !== undefined) {
    penalty.lower.fill(box[0], 1);
    penalty.upper.fill(box[1], 1);
  }
  return penalty;
}
