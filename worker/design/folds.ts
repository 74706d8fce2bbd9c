import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { LevelColumn, Table } from '../source/table.js';
import { sourceRow } from './response.js';

/** Rows by label: a fold or a cluster each. */
export interface Labelled {
  /** Those with rows here, by code unit. */
  readonly labels: readonly string[];
  /** Index into `labels`, one a row. */
  readonly ofRow: Int32Array;
}

/** Longest label of a fold: longer ones do not fit a message. */
const LABEL_LONGEST = 200;

/**
 * The folds of the specification's cross-validation, null without one. Fails with `field-value` (more folds than rows,
 * more labels than the protocol carries, a label too long).
 */
export function foldsOf({ choose }: FitSpecification, table: Table): Checked<Labelled | null> {
  if (choose?.kind !== 'folds') return succeed(null);
  const { by } = choose;
  if (by.kind === 'column') return byColumn(by.column, table);
  if (table.rowCount < by.folds)
    return fail(
      'rows-too-few',
      `This table has ${table.rowCount} rows to use, the cross-validation makes ${by.folds} folds of them.`,
      { remedy: 'Choose with fewer folds, or run without this site.' },
    );
  const codes = foldCodes(by, table);
  return succeed(
    labelled({ levels: Array.from({ length: by.folds }, (_, fold) => String(fold + 1)), codes }),
  );
}

/** The fold of each row, from 0, by its number in the whole table: of no account what else is missing or dropped. */
export function foldCodes(
  { seed, folds }: { readonly seed: number; readonly folds: number },
  table: Pick<Table, 'rowCount' | 'rowNumbers'>,
): Int32Array {
  const hash = rowHash(seed);
  return Int32Array.from({ length: table.rowCount }, (_, row) =>
    Math.floor((hash(sourceRow(table, row) - 1) * folds) / 2 ** 32),
  );
}

function byColumn(column: string, table: Table): Checked<Labelled> {
  const found = labelled(labelColumn(table, column));
  const where = { column };
  if (found.labels.length > LIMITS.foldsMost)
    return fail(
      'field-value',
      `The fold column has ${found.labels.length} values at this site; allowed: ${LIMITS.foldsMost} at most.`,
      { where, remedy: 'Name a column with one value for each fold.' },
    );
  if (found.labels.some((label) => label.length > LABEL_LONGEST))
    return fail('field-value', `A value of the fold column is longer than ${LABEL_LONGEST} characters.`, {
      where,
      remedy: 'Give the folds short names.',
    });
  return succeed(found);
}

/** The clusters of the specification's sandwich, null where it names none. */
export function clustersOf({ report }: FitSpecification, table: Table): Labelled | null {
  const column = report.sandwich?.cluster ?? null;
  return column === null ? null : labelled(labelColumn(table, column));
}

export function labelColumn(table: Table, column: string): LevelColumn {
  const values = table.labels?.get(column);
  if (values === undefined) throw new Error(`the table was read without the labels of ${column}`);
  return values;
}

/** Only the labels that occur, in order; a label that stands twice in `levels` is one. */
function labelled({ levels, codes }: LevelColumn): Labelled {
  const used = new Uint8Array(levels.length);
  for (const code of codes) used[code] = 1;
  const labels = [...new Set(levels.filter((_, code) => used[code] === 1))].sort();
  const places = new Map(labels.map((label, place) => [label, place]));
  const placeOf = Int32Array.from(levels, (level) => places.get(level) ?? -1);
  return { labels, ofRow: codes.map((code) => placeOf[code]) };
}

/**
 * A whole number in [0, 2³²) for a row number: the finaliser of MurmurHash3 (Appleby, public domain) over a Weyl
 * sequence that begins where the seed says, as protocol/README.md has it. Seeds are below 2³².
 */
export function rowHash(seed: number): (row: number) => number {
  const begin = mixed(mixed(seed + WEYL));
  return (row) => mixed(begin + Math.imul(row, WEYL));
}

/** 2³² over the golden ratio, odd. */
const WEYL = 0x9e3779b9;

function mixed(word: number): number {
  let h = word >>> 0;
  h = Math.imul(h ^ (h >>> 16), 0x85ebca6b);
  h = Math.imul(h ^ (h >>> 13), 0xc2b2ae35);
  return (h ^ (h >>> 16)) >>> 0;
}
