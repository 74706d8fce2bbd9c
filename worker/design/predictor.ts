import { rowProducts } from '../../numerics/rows.js';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { DesignColumn } from '../../protocol/specification/types.js';
import type { LevelColumn, Table } from '../source/table.js';
import { factorValues, fillDesign } from './factors.js';
import { type LevelRules, levelRules } from './level-rules.js';
import { factorsOf } from './request.js';
import { OFFSET_MOST } from './value-limit.js';

/** A column of the table that a model reads. */
export interface ModelInput {
  readonly column: string;
  /** Levels in code order; null for a numeric column. */
  readonly levels: readonly string[] | null;
  readonly unit: string | null;
}

/**
 * Computes the linear predictor of rows from a model, on the scale of the columns as they are, with the very functions
 * that make the design of a fit. Columns that only coefficients of 0 multiply are not read.
 */
export class Predictor {
  /** In the order in which values are given. */
  readonly inputs: readonly ModelInput[];
  readonly levelRules: LevelRules;
  /** Design columns whose coefficient is not 0. */
  readonly columns: readonly DesignColumn[];
  private readonly coefficients: Float64Array;
  private readonly intercept: number;
  private readonly positionOf: ReadonlyMap<string, number>;
  private x = new Float64Array(0);

  constructor(private readonly model: ModelDocument) {
    const given = new Map(model.coefficients.map(({ name, value }) => [name, value]));
    this.columns = designColumns(model).filter(({ name }) => (given.get(name) ?? 0) !== 0);
    this.coefficients = Float64Array.from(this.columns, ({ name }) => given.get(name) ?? 0);
    this.intercept = model.intercept ?? 0;
    this.inputs = inputsOf(model, this.columns);
    this.positionOf = new Map(this.inputs.map(({ column }, position) => [column, position]));
    this.levelRules = levelRules(model, this.inputs);
  }

  /**
   * One number a row; NaN for a row that cannot be scored (`rowFault` says why).
   *
   * @param values one array for each of `inputs`: numbers, or codes of levels; `MARK` where there is none
   */
  predict(values: readonly Float64Array[], rowCount: number): Float64Array {
    const width = this.columns.length;
    if (this.x.length < rowCount * width) this.x = new Float64Array(rowCount * width);
    const table = this.tableOf(values, rowCount);
    fillDesign(this.x, this.columns, factorValues(this.columns, table), rowCount);
    const eta = new Float64Array(rowCount);
    rowProducts(this.x, width, 0, rowCount, this.coefficients, eta);
    for (let row = 0; row < rowCount; row++) eta[row] += this.intercept;
    this.addOffset(values, eta);
    this.markUnfit(values, eta);
    return eta;
  }

  private tableOf(values: readonly Float64Array[], rowCount: number): Table {
    const numeric = new Map<string, Float64Array>();
    const levels = new Map<string, LevelColumn>();
    this.inputs.forEach((input, position) => {
      if (input.levels === null) numeric.set(input.column, values[position]);
      else levels.set(input.column, { levels: input.levels, codes: new Int32Array(values[position]) });
    });
    return { rowCount, rowsDropped: 0, numeric, levels };
  }

  private addOffset(values: readonly Float64Array[], eta: Float64Array): void {
    const { offset } = this.model;
    if (offset === null) return;
    const given = values[this.positionOf.get(offset.column) ?? -1];
    for (let row = 0; row < eta.length; row++) {
      const added = offset.kind === 'offset' ? given[row] : Math.log(given[row]);
      eta[row] += Math.abs(added) <= OFFSET_MOST ? added : Number.NaN;
    }
  }

  private markUnfit(values: readonly Float64Array[], eta: Float64Array): void {
    const etaMost = this.model.inverseLink === 'exponential' ? OFFSET_MOST : Number.MAX_VALUE;
    for (let row = 0; row < eta.length; row++) if (!(Math.abs(eta[row]) <= etaMost)) eta[row] = Number.NaN;
    this.inputs.forEach((input, position) => {
      const given = values[position];
      const allowed = this.levelRules.seen[position];
      for (let row = 0; row < eta.length; row++) {
        if (input.levels === null ? !Number.isFinite(given[row]) : allowed[given[row]] !== true)
          eta[row] = Number.NaN;
      }
    });
    for (const together of this.levelRules.neverTogether)
      for (let row = 0; row < eta.length; row++)
        if (together.every(({ position, code }) => values[position][row] === code)) eta[row] = Number.NaN;
  }
}

/** Numeric columns first, each column once: those of the terms with a coefficient that is not 0, and the offset. */
function inputsOf(model: ModelDocument, columns: readonly DesignColumn[]): ModelInput[] {
  const used = new Set(columns.flatMap(({ factors }) => factors.map(({ column }) => column)));
  const units = new Map<string, string>();
  const levels = new Map<string, string[]>();
  for (const term of factorsOf(model)) {
    if (!used.has(term.column)) continue;
    if (term.kind === 'numeric') {
      if (term.unit !== null && !units.has(term.column)) units.set(term.column, term.unit);
    } else {
      const before = levels.get(term.column) ?? [];
      levels.set(term.column, [...new Set([...before, ...term.levels])]);
    }
  }
  if (model.offset !== null) used.add(model.offset.column);
  const numeric = [...used].filter((column) => !levels.has(column));
  return [
    ...numeric.map((column) => ({ column, levels: null, unit: units.get(column) ?? null })),
    ...[...levels].map(([column, listed]) => ({ column, levels: listed, unit: null })),
  ];
}
