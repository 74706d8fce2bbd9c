import { designColumnCount } from '../../protocol/specification/design-columns.js';
import type { LevelsTerm, Term } from '../../protocol/specification/types.js';
import type { Table } from '../source/table.js';
import type { Entries } from './entries.js';
import { levelColumn, type TransformedColumns } from './factors.js';

/**
 * A design is kept by its entries from so many columns on, where so few of them can be other than zero in a row. Below,
 * whole rows are as quick to pass over (measured with `bench:sparse`), and the algebra of matrices has kernels for them.
 */
export const SPARSE_FROM = { columns: 200, entriesShareMost: 0.05 } as const;

/** By the terms alone, so that every site and every table has the same kind. A term gives a row one entry at most. */
export function isSparse(terms: readonly Term[]): boolean {
  const p = designColumnCount(terms);
  return p >= SPARSE_FROM.columns && terms.length <= SPARSE_FROM.entriesShareMost * p;
}

/** What one factor of a term adds to the place of a row's entry, and to its value. */
type Part =
  | { readonly kind: 'numeric'; readonly values: Float64Array }
  /** `placeOf[code]`: the level's place among those with a coefficient, times the stride; −1 without one. */
  | { readonly kind: 'levels'; readonly codes: Int32Array; readonly placeOf: Int32Array };

interface TermParts {
  /** Design columns of the terms before. */
  readonly first: number;
  readonly parts: readonly Part[];
}

/** The entries of the design in the order of `designColumns`, a row's in ascending order of columns. */
export function sparseEntries(terms: readonly Term[], numeric: TransformedColumns, table: Table): Entries {
  const { rowCount } = table;
  const made = partsOf(terms, numeric, table);
  const starts = new Int32Array(rowCount + 1);
  for (const { parts } of made)
    for (let row = 0; row < rowCount; row++) if (placeIn(parts, row) >= 0) starts[row + 1]++;
  for (let row = 0; row < rowCount; row++) starts[row + 1] += starts[row];
  const columns = new Int32Array(starts[rowCount]);
  const values = new Float64Array(starts[rowCount]);
  const next = starts.slice(0, rowCount);
  for (const { first, parts } of made)
    for (let row = 0; row < rowCount; row++) {
      const place = placeIn(parts, row);
      if (place < 0) continue;
      const at = next[row]++;
      columns[at] = first + place;
      values[at] = valueIn(parts, row);
    }
  return { rowCount, starts, columns, values };
}

function partsOf(terms: readonly Term[], numeric: TransformedColumns, table: Table): TermParts[] {
  let first = 0;
  return terms.map((term) => {
    const factors = term.kind === 'product' ? term.factors : [term];
    const parts: Part[] = [];
    // the last factor runs fastest
    let stride = 1;
    for (const factor of [...factors].reverse()) {
      if (factor.kind === 'numeric') parts.unshift({ kind: 'numeric', values: numeric.of(factor) });
      else {
        const { part, count } = levelsPart(factor, stride, table);
        parts.unshift(part);
        stride *= count;
      }
    }
    const own = { first, parts };
    first += stride;
    return own;
  });
}

function levelsPart(term: LevelsTerm, stride: number, table: Table): { part: Part; count: number } {
  const { levels, codes } = levelColumn(table, term.column);
  const listed = term.levels.filter((level) => level !== term.baseline);
  const places = new Map(listed.map((level, place) => [level, place * stride]));
  const placeOf = Int32Array.from(levels, (level) => places.get(level) ?? -1);
  return { part: { kind: 'levels', codes, placeOf }, count: listed.length };
}

/** Where among the term's columns the row has its entry; −1 where it has none. */
function placeIn(parts: readonly Part[], row: number): number {
  let place = 0;
  for (const part of parts) {
    if (part.kind === 'numeric') continue;
    const own = part.placeOf[part.codes[row]];
    if (own < 0) return -1;
    place += own;
  }
  return place;
}

function valueIn(parts: readonly Part[], row: number): number {
  let value = 1;
  for (const part of parts) if (part.kind === 'numeric') value *= part.values[row];
  return value;
}
