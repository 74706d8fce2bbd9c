import type { DuckDBDataChunk, DuckDBScalarFunctionInfo, DuckDBVector } from '@duckdb/node-api';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import type { Predictor } from '../design/predictor.js';
import { type RowFault, rowFault } from '../design/row-fault.js';
import { lossMean } from '../losses/index.js';
import type { Engine } from '../source/duckdb.js';
import { FUNCTIONS } from './score-sql.js';

/** Rows seen so far, and what came of them. */
export interface Count {
  rows: number;
  flagged: number;
  /** True once a row could not be scored and the statement was to stop at the first such row. */
  stopped: boolean;
}

export interface Callbacks {
  readonly count: Count;
  /** Whether a row that cannot be scored ends the statement. */
  stopAtFault: boolean;
  /** Told the rows seen so far. */
  seen: (rows: number) => void;
  /** What was thrown inside a callback: a defect, to be thrown again outside of DuckDB. */
  thrown: unknown;
}

/**
 * Registers the functions by which SQL asks this program for linear predictors, predictions and notes, a chunk of rows at
 * a time. DuckDB reads, orders and writes on threads of its own; the arithmetic is that of the fit and stays here.
 */
export async function registerCallbacks(
  engine: Engine,
  model: ModelDocument,
  predictor: Predictor,
): Promise<Callbacks> {
  const { DuckDBScalarFunction, DOUBLE, VARCHAR } = await import('@duckdb/node-api');
  const callbacks: Callbacks = {
    count: { rows: 0, flagged: 0, stopped: false },
    stopAtFault: false,
    seen: () => undefined,
    thrown: null,
  };
  const inputCount = predictor.inputs.length;
  const guarded =
    (main: (info: DuckDBScalarFunctionInfo, chunk: DuckDBDataChunk, out: DuckDBVector) => void) =>
    (info: DuckDBScalarFunctionInfo, chunk: DuckDBDataChunk, out: DuckDBVector): void => {
      try {
        main(info, chunk, out);
        out.flush();
      } catch (error) {
        callbacks.thrown ??= error;
        info.setError('a callback failed');
      }
    };
  const register = (options: Parameters<typeof DuckDBScalarFunction.create>[0]): void =>
    engine.connection.registerScalarFunction(DuckDBScalarFunction.create(options));
  register({
    name: FUNCTIONS.predictor,
    returnType: DOUBLE,
    parameterTypes: new Array(Math.max(1, inputCount)).fill(DOUBLE),
    mainFunction: guarded((info, chunk, out) => {
      const { rowCount } = chunk;
      const values = predictor.inputs.map((_, position) => doublesOf(chunk.getColumnVector(position)));
      const eta = predictor.predict(values, rowCount);
      write(out, eta);
      let unfit = 0;
      for (let row = 0; row < rowCount; row++) if (Number.isNaN(eta[row])) unfit++;
      callbacks.count.rows += rowCount;
      callbacks.count.flagged += unfit;
      callbacks.seen(callbacks.count.rows);
      if (unfit === 0 || !callbacks.stopAtFault) return;
      callbacks.count.stopped = true;
      info.setError('a row cannot be scored');
    }),
  });
  const mean = lossMean(model.loss);
  register({
    name: FUNCTIONS.mean,
    returnType: DOUBLE,
    parameterTypes: [DOUBLE],
    mainFunction: guarded((_, chunk, out) => {
      write(out, doublesOf(chunk.getColumnVector(0)).map(mean));
    }),
  });
  if (inputCount === 0) return callbacks;
  register({
    name: FUNCTIONS.note,
    returnType: VARCHAR,
    parameterTypes: [...new Array(inputCount).fill(DOUBLE), ...new Array(inputCount).fill(VARCHAR)],
    // a text that is missing comes as a null, and is told of
    specialHandling: true,
    mainFunction: guarded((_, chunk, out) => {
      const columns = Array.from({ length: 2 * inputCount }, (__, at) => chunk.getColumnVector(at));
      for (let row = 0; row < chunk.rowCount; row++) {
        const cells = columns.map((column) => column.getItem(row));
        const fault = faultOf(predictor, model, cells);
        out.setItem(row, fault.column === null ? fault.message : `${fault.column}: ${fault.message}`);
      }
    }),
  });
  return callbacks;
}

/** @param cells the values of a row and then its texts, as DuckDB gives them */
export function faultOf(predictor: Predictor, model: ModelDocument, cells: readonly unknown[]): RowFault {
  const inputCount = predictor.inputs.length;
  const values = cells.slice(0, inputCount).map(Number);
  const texts = cells.slice(inputCount).map((cell) => (cell === null ? null : String(cell)));
  return rowFault(predictor, values, texts, model.offset);
}

/**
 * The numbers of a vector without SQL nulls. They are there as one array, which the library does not hand out; reading
 * them one by one takes longer than all the arithmetic.
 */
function doublesOf(vector: DuckDBVector): Float64Array {
  const items: unknown = Reflect.get(vector, 'items');
  if (items instanceof Float64Array) return items;
  return Float64Array.from({ length: vector.itemCount }, (_, row) => Number(vector.getItem(row)));
}

function write(vector: DuckDBVector, values: Float64Array): void {
  const items: unknown = Reflect.get(vector, 'items');
  if (items instanceof Float64Array) items.set(values);
  else for (let row = 0; row < values.length; row++) vector.setItem(row, values[row]);
}
