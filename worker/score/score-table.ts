import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import { type ModelInput, Predictor } from '../design/predictor.js';
import { createEnumSql } from '../source/column-sql.js';
import { type Engine, openEngine, textRows, unreadable } from '../source/duckdb.js';
import { missingColumn } from '../source/relation.js';
import { type Callbacks, faultOf, registerCallbacks } from './callbacks.js';
import { openScoreRelation, type ScoreFormat, type ScoreRelation } from './score-relation.js';
import { copySql, enumName, firstFaultSql } from './score-sql.js';

export interface ScoreRequest {
  readonly model: ModelDocument;
  readonly table: { readonly path: string; readonly kind: ScoreFormat };
  /** Where the predictions go; a file there is written over. */
  readonly out: { readonly path: string; readonly format: ScoreFormat };
  /** Columns of the table to write beside the predictions; null: all. */
  readonly columns: readonly string[] | null;
  /** A row that cannot be scored is written without a prediction and with a note, instead of ending the work. */
  readonly flagRows: boolean;
  readonly threads: number;
  /** Called with the rows seen so far, a chunk at a time. */
  readonly seen: (rows: number) => void;
  readonly signal: AbortSignal;
}

export interface Scored {
  readonly rows: number;
  readonly flagged: number;
  /** The columns that the model read. */
  readonly inputs: readonly ModelInput[];
}

const ADDED = ['prediction', 'linear_predictor', 'note'];

/**
 * Writes the rows of a table with `prediction` (the mean response) and `linear_predictor`, in the table's order. Memory
 * does not grow with the table. `path` is for the caller to remove where this fails.
 *
 * Fails like `readTable`; `field-conflict` where a column to write has a name that is added, `header-duplicate` where
 * two names of the output differ by case only, `run-cancelled` where `signal` ended it. Without `flagRows` the first row
 * that cannot be scored fails with `value-missing`, `column-not-numeric`, `value-not-finite`, `level-unknown` or
 * `exposure-not-positive`.
 */
export async function scoreTable(request: ScoreRequest): Promise<Checked<Scored>> {
  const engine = await openEngine({ threads: request.threads });
  const interrupt = (): void => engine.connection.interrupt();
  try {
    request.signal.addEventListener('abort', interrupt);
    const scored = await scoreWith(engine, request);
    return request.signal.aborted && !scored.ok
      ? fail('run-cancelled', 'Interrupted: no prediction was kept.')
      : scored;
  } finally {
    request.signal.removeEventListener('abort', interrupt);
    engine.close();
  }
}

async function scoreWith(engine: Engine, request: ScoreRequest): Promise<Checked<Scored>> {
  const { model, table, out, flagRows } = request;
  const opened = await openScoreRelation(engine, table.kind, table.path);
  if (!opened.ok) return opened;
  const relation = opened.value;
  const predictor = new Predictor(model);
  const { inputs } = predictor;
  const names = [...relation.columns.keys()];
  const absent = absentInput(names, inputs, relation);
  if (absent !== null) return absent;
  const columns = writtenColumns(request, names, relation);
  if (!columns.ok) return columns;
  for (const [position, { levels }] of inputs.entries()) {
    if (levels === null) continue;
    const created = await textRows(engine, createEnumSql(enumName(position), levels), relation.where);
    if (!created.ok) return created;
  }
  const callbacks = await registerCallbacks(engine, model, predictor);
  callbacks.seen = request.seen;
  callbacks.stopAtFault = !flagRows;
  const sql = copySql({
    relation,
    inputs,
    columns: columns.value,
    flagRows: flagRows && inputs.length > 0,
    format: out.format,
    out: out.path,
  });
  try {
    await engine.connection.run(sql);
  } catch (error) {
    if (callbacks.thrown !== null) throw callbacks.thrown;
    if (callbacks.count.stopped) return firstFault(engine, relation, predictor, model, callbacks);
    return unreadable(error, relation.where);
  }
  return succeed({ rows: callbacks.count.rows, flagged: callbacks.count.flagged, inputs });
}

/** The model's unit is named, since the column of another name may hold another unit. */
function absentInput(
  names: readonly string[],
  inputs: readonly ModelInput[],
  { where }: ScoreRelation,
): ReturnType<typeof fail> | null {
  const absent = missingColumn(
    names,
    inputs.map(({ column }) => column),
    where,
  );
  if (absent === null) return null;
  const unit = inputs.find(({ column }) => column === absent.failure.where?.column)?.unit ?? null;
  if (unit === null) return absent;
  const { code, message, remedy, where: place } = absent.failure;
  return fail(code, message, { where: place, remedy: `${remedy} The model takes it in ${unit}.` });
}

function writtenColumns(
  { columns, flagRows, table }: ScoreRequest,
  names: readonly string[],
  { where }: ScoreRelation,
): Checked<readonly string[]> {
  const written = columns ?? names;
  const absent = missingColumn(names, written, where);
  if (absent !== null) return absent;
  const added = ADDED.slice(0, flagRows ? 3 : 2);
  const taken = new Map<string, string>();
  for (const name of [...added, ...written]) {
    const before = taken.get(name.toLowerCase());
    taken.set(name.toLowerCase(), name);
    if (before === undefined) continue;
    const remedy = 'Name the columns to write with --columns, each once.';
    if (added.includes(before))
      return fail('field-conflict', `The table has a column "${name}", which is also what is added.`, {
        where: { file: table.path, column: name },
        remedy,
      });
    return fail('header-duplicate', `Columns to write have the names "${before}" and "${name}".`, {
      where: { file: table.path, column: name },
      remedy,
    });
  }
  return succeed(written);
}

/** Reads the table once more, to the first row that cannot be scored: chunks are not computed in their order. */
async function firstFault(
  engine: Engine,
  relation: ScoreRelation,
  predictor: Predictor,
  model: ModelDocument,
  callbacks: Callbacks,
): Promise<Checked<never>> {
  callbacks.stopAtFault = false;
  const { where } = relation;
  const rows = await cellsOf(engine, firstFaultSql(relation, predictor.inputs), relation);
  if (callbacks.thrown !== null) throw callbacks.thrown;
  if (!rows.ok) return rows;
  const [found] = rows.value;
  if (found === undefined) return fail('table-unreadable', 'The table changed while it was read.', { where });
  const [row, ...cells] = found;
  const { code, column, message, remedy } = faultOf(predictor, model, cells);
  return fail(code, message, {
    where: { ...where, row: Number(row) + 1, ...(column === null ? {} : { column }) },
    remedy: `${remedy} With --flag-rows such rows are written without a prediction.`,
  });
}

async function cellsOf(
  engine: Engine,
  sql: string,
  { where }: ScoreRelation,
): Promise<Checked<readonly unknown[][]>> {
  try {
    return succeed((await engine.connection.runAndReadAll(sql)).getRows());
  } catch (error) {
    return unreadable(error, where);
  }
}
