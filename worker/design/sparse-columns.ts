import { type Entries, entryCounts } from './entries.js';
import type { Occupied } from './rows.js';

/** Solver columns by their entries: x_rj = entry_rj − shift_j. The ones of an intercept are a shift of −1. */
export interface SparseColumns {
  readonly entries: Entries;
  readonly p: number;
  readonly shift: Float64Array;
  /** Columns before those of the design: 1 with an intercept, else 0. */
  readonly lead: number;
  /** The columns that have entries, or null where most have. Made once. */
  occupation(): Occupation | null;
}

type Occupation = Omit<Occupied, 'rows'> & { readonly inner: SparseColumns };

/** Share of idle columns above which they are set apart. */
const IDLE_SHARE_LEAST = 0.25;

export function sparseColumns(entries: Entries, shift: Float64Array, lead: number): SparseColumns {
  let made: Occupation | null | undefined;
  const p = shift.length;
  return {
    entries,
    p,
    shift,
    lead,
    occupation() {
      if (made === undefined) made = occupationOf(entries, shift, lead);
      return made;
    },
  };
}

function occupationOf(entries: Entries, shift: Float64Array, lead: number): Occupation | null {
  const p = shift.length;
  const counts = entryCounts(entries, p, 0, entries.rowCount);
  const placeOf = new Int32Array(p).fill(-1);
  let width = 0;
  for (let j = 0; j < p; j++) if (j < lead || counts[j] > 0) placeOf[j] = width++;
  if (p - width < IDLE_SHARE_LEAST * p) return null;
  const columns = new Int32Array(width);
  const idle = new Int32Array(p - width);
  for (let j = 0, k = 0, i = 0; j < p; j++)
    if (placeOf[j] >= 0) columns[k++] = j;
    else idle[i++] = j;
  const values = Float64Array.from(idle, (j) => -shift[j]);
  const shifting = values.some((value) => value !== 0);
  const own = new Float64Array(width + (shifting ? 1 : 0));
  for (let k = 0; k < width; k++) own[k] = shift[columns[k]];
  if (shifting) own[width] = -1;
  const placed = new Int32Array(entries.columns.length);
  for (let e = 0; e < placed.length; e++) placed[e] = placeOf[entries.columns[e]];
  return {
    columns,
    idle: { columns: idle, values },
    shifting,
    inner: sparseColumns({ ...entries, columns: placed }, own, lead),
  };
}
