import { type Checked, succeed } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import { designColumnNames, designColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification, Folds } from '../../protocol/specification/types.js';
import {
  type GrowingColumn,
  growingCodes,
  growingDoubles,
  growingRowNumbers,
} from '../source/growing-column.js';
import type { LevelColumn, Table } from '../source/table.js';
import { buildRawShard } from './build.js';
import { levelColumn } from './factors.js';
import { clustersOf, foldCodes, foldsOf, labelColumn } from './folds.js';
import { groupedByFold } from './group-rows.js';
import { factorsOf } from './request.js';
import { numericColumn } from './response.js';
import type { RawRows } from './rows.js';
import type { MarginColumns, RawShard } from './shard.js';

/** Rows of the design as they come in. */
export interface DesignPart {
  /** Row-major. */
  readonly x: Float64Array;
  readonly rowCount: number;
  /** The group of each row, a fold each; null without folds. */
  readonly groups: Int32Array | null;
}

/** The design as it was kept. */
export interface KeptDesign {
  readonly rows: RawRows;
  /** True: group after group, in the order asked for; false: as they came in. */
  readonly grouped: boolean;
}

/** Numbers that solvers keep for each row: predictors, slopes and curvatures at a few points. */
const WORKING_NUMBERS = 8;

/**
 * A shard made of parts of its table, one after the other: `buildRawShard` for rows whose design is kept somewhere else.
 * What stands beside the design (response, weights, offset, folds, clusters, the columns of margins) stays here.
 */
export class ShardAssembly {
  readonly columns: readonly string[];
  #rowCount = 0;
  readonly #spec: FitSpecification;
  /** The same design without what needs all rows at once. */
  readonly #byRow: FitSpecification;
  readonly #y = growingDoubles();
  readonly #weights: GrowingColumn<Float64Array> | null;
  readonly #offset: GrowingColumn<Float64Array> | null;
  readonly #rowNumbers: GrowingColumn<Uint32Array> | null;
  readonly #labels = new Map<string, GrowingCodes>();
  readonly #margins: GrowingMargins | null;
  readonly #groups: Groups | null;

  constructor(spec: FitSpecification) {
    this.#spec = spec;
    const { choose, report } = spec;
    this.#byRow = { ...spec, choose: null, report: { ...report, sandwich: null, margins: false } };
    this.columns = designColumnNames(spec);
    this.#weights = spec.weights === null ? null : growingDoubles();
    this.#offset = spec.offset === null ? null : growingDoubles();
    this.#groups = choose?.kind === 'folds' ? new Groups(choose.by) : null;
    this.#rowNumbers = this.#groups?.byNumber === true ? growingRowNumbers() : null;
    this.#margins = report.margins ? new GrowingMargins(spec) : null;
  }

  get rowCount(): number {
    return this.#rowCount;
  }

  /** Bytes in memory for each row, whatever is done with the design: here, beside the solver columns, and at work. */
  get bytesPerRow(): number {
    const beside = 8 * (1 + Number(this.#weights !== null) + Number(this.#offset !== null));
    const twice = this.#groups === null ? 1 : 2;
    const codes = 4 * this.#labels.size + (this.#groups === null ? 0 : 12);
    const margins = this.#margins?.bytesPerRow ?? 0;
    return beside * (1 + twice) + codes * twice + margins * twice + 8 * WORKING_NUMBERS;
  }

  /** The design of a part. Fails as `buildRawShard`, at the first part that it would fail at. */
  append(part: Table): Checked<DesignPart> {
    const built = buildRawShard(this.#byRow, part);
    if (!built.ok) return built;
    const { rowCount, rows, y, weights, offset } = built.value;
    const x = new Float64Array(rowCount * rows.p);
    rows.copy(0, rowCount, x);
    this.#y.appendAll(y);
    if (weights !== null) this.#weights?.appendAll(weights);
    if (offset !== null) this.#offset?.appendAll(offset);
    if (part.rowNumbers !== undefined) this.#rowNumbers?.appendAll(part.rowNumbers);
    for (const [name, column] of part.labels ?? []) this.#labelsOf(name).append(column);
    this.#margins?.append(part);
    this.#rowCount += rowCount;
    const groups = this.#groups?.of(part) ?? null;
    if (this.#groups !== null && this.#groups.count > LIMITS.foldsMost) {
      const tooMany = foldsOf(this.#spec, this.#tableOf(0));
      if (!tooMany.ok) return tooMany;
    }
    return succeed({ x, rowCount, groups });
  }

  /** `keep` is given the groups in the order in which their rows have to stand. Fails as `buildRawShard`. */
  finish(rowsDropped: number, keep: (order: readonly number[]) => Checked<KeptDesign>): Checked<RawShard> {
    const table = this.#tableOf(rowsDropped);
    // the words of the builder for a table without rows
    if (table.rowCount === 0) return buildRawShard(this.#byRow, table);
    const folds = foldsOf(this.#spec, table);
    if (!folds.ok) return folds;
    const clusters = clustersOf(this.#spec, table);
    const order = folds.value?.labels.map((label) => this.#groups?.named(label) ?? 0) ?? [0];
    const kept = keep(order);
    if (!kept.ok) return kept;
    const { rows, grouped } = kept.value;
    const raw: RawShard = {
      rowCount: table.rowCount,
      rowsDropped,
      columns: this.columns,
      rows,
      y: this.#y.finish(),
      weights: this.#weights?.finish() ?? null,
      offset: this.#offset?.finish() ?? null,
      folds: null,
      clusters: clusters === null ? null : { count: clusters.labels.length, ofRow: clusters.ofRow },
      margins: this.#margins?.finish() ?? null,
    };
    return succeed(folds.value === null ? raw : groupedByFold(raw, folds.value, grouped ? rows : null));
  }

  #labelsOf(name: string): GrowingCodes {
    const found = this.#labels.get(name) ?? new GrowingCodes();
    this.#labels.set(name, found);
    return found;
  }

  /** What folds and clusters are made of; used up. */
  #tableOf(rowsDropped: number): Table {
    const rowNumbers = this.#rowNumbers?.finish();
    return {
      rowCount: this.#rowCount,
      rowsDropped,
      ...(rowNumbers === undefined ? {} : { rowNumbers }),
      numeric: new Map(),
      levels: new Map(),
      labels: new Map([...this.#labels].map(([name, codes]) => [name, codes.finish()])),
    };
  }
}

/** Which rows belong together, by numbers that parts of a table agree on. */
class Groups {
  readonly #by: Folds;
  readonly #seen = new Set<number>();
  /** Place of each label in the list; of one that stands there twice the first. */
  readonly #places = new Map<string, number>();
  #firsts: Int32Array | null = null;

  constructor(by: Folds) {
    this.#by = by;
  }

  get byNumber(): boolean {
    return this.#by.kind !== 'column';
  }

  get count(): number {
    return this.#seen.size;
  }

  of(part: Table): Int32Array {
    const groups =
      this.#by.kind === 'column' ? this.#byLabel(part, this.#by.column) : foldCodes(this.#by, part);
    for (const group of groups) this.#seen.add(group);
    return groups;
  }

  named(label: string): number {
    return this.byNumber ? Number(label) - 1 : (this.#places.get(label) ?? -1);
  }

  #byLabel(part: Table, name: string): Int32Array {
    const { levels, codes } = labelColumn(part, name);
    this.#firsts ??= Int32Array.from(levels, (label, place) => {
      const first = this.#places.get(label) ?? place;
      this.#places.set(label, first);
      return first;
    });
    const firsts = this.#firsts;
    return codes.map((code) => firsts[code]);
  }
}

class GrowingCodes {
  #levels: readonly string[] = [];
  readonly #codes = growingCodes();

  append({ levels, codes }: LevelColumn): void {
    this.#levels = levels;
    this.#codes.appendAll(codes);
  }

  finish(): LevelColumn {
    return { levels: this.#levels, codes: this.#codes.finish() };
  }
}

/** The columns of the terms. */
class GrowingMargins {
  readonly #spec: FitSpecification;
  readonly #numeric = new Map<string, GrowingColumn<Float64Array>>();
  readonly #levels = new Map<string, GrowingCodes>();

  constructor(spec: FitSpecification) {
    this.#spec = spec;
    for (const { kind, column } of factorsOf(spec)) {
      if (kind === 'numeric') this.#numeric.set(column, growingDoubles());
      else this.#levels.set(column, new GrowingCodes());
    }
  }

  get bytesPerRow(): number {
    return 8 * this.#numeric.size + 4 * this.#levels.size;
  }

  append(part: Table): void {
    for (const [name, column] of this.#numeric) column.appendAll(numericColumn(part, name));
    for (const [name, column] of this.#levels) column.append(levelColumn(part, name));
  }

  finish(): MarginColumns {
    return {
      columns: designColumns(this.#spec),
      numeric: new Map([...this.#numeric].map(([name, column]) => [name, column.finish()])),
      levels: new Map([...this.#levels].map(([name, column]) => [name, column.finish()])),
    };
  }
}
