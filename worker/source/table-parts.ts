import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { type GrowingColumn, growingCodes, growingDoubles, growingRowNumbers } from './growing-column.js';
import { leavesRowsOut, type Scan, type ScannedRows } from './scan.js';
import type { LevelColumn, Table, TableRequest } from './table.js';

/** What codes stand for: levels of each request, labels of each column of labels. */
export interface ValueLists {
  readonly permitted: readonly (readonly string[])[];
  readonly labelled: readonly (readonly string[])[];
}

/** The rows used of a whole source. */
export class WholeTable {
  private readonly columns: GrowingColumn<Float64Array | Int32Array>[];
  private readonly rowNumbers: GrowingColumn<Uint32Array> | null;
  private readonly bytesPerRow: number;
  private rowCount = 0;

  constructor(
    private readonly request: TableRequest,
    private readonly bytesMost: number,
  ) {
    const coded = request.levels.length + (request.labels ?? []).length;
    this.columns = [...request.numeric.map(growingDoubles), ...Array.from({ length: coded }, growingCodes)];
    this.rowNumbers = leavesRowsOut(request) ? growingRowNumbers() : null;
    this.bytesPerRow = 8 * request.numeric.length + 4 * coded + 4;
  }

  take({ values, used, firstRow }: ScannedRows): Checked<null> {
    this.rowCount += used.length;
    if (this.rowCount * this.bytesPerRow > this.bytesMost)
      return fail(
        'table-unreadable',
        `The columns used of the first ${this.rowCount} rows take ${this.rowCount * this.bytesPerRow} bytes: the table is larger than the memory of this machine.`,
        { remedy: 'Say how much memory the rows may take, and keep the rest on disk: join --memory 2GB.' },
      );
    this.columns.forEach((column, j) => {
      column.append(values[j], used);
    });
    this.rowNumbers?.appendAll(numbersOf(used, firstRow));
    return succeed(null);
  }

  finish(scan: Scan, lists: ValueLists): Table {
    const values = this.columns.map((column) => column.finish());
    const rowNumbers = this.rowNumbers?.finish();
    const whole = scan.rowCount === scan.rowsSeen;
    return {
      rowCount: scan.rowCount,
      rowsDropped: scan.rowsDropped,
      ...(whole || rowNumbers === undefined ? {} : { rowNumbers }),
      ...named(values, this.request, lists),
    };
  }
}

/** Some rows used as a table of their own. */
export function partOf(
  { values, used, firstRow }: ScannedRows,
  request: TableRequest,
  lists: ValueLists,
): Table {
  const numeric = request.numeric.length;
  const columns = values.map((given, j) => {
    const out = j < numeric ? new Float64Array(used.length) : new Int32Array(used.length);
    for (let i = 0; i < out.length; i++) out[i] = given[used[i]];
    return out;
  });
  return {
    rowCount: used.length,
    rowsDropped: 0,
    rowNumbers: numbersOf(used, firstRow),
    ...named(columns, request, lists),
  };
}

const numbersOf = (used: Int32Array, firstRow: number): Uint32Array =>
  Uint32Array.from(used, (place) => firstRow + place);

function named(
  values: readonly (Float64Array | Int32Array)[],
  request: TableRequest,
  { permitted, labelled }: ValueLists,
): Pick<Table, 'numeric' | 'levels' | 'labels'> {
  const numeric = new Map<string, Float64Array>();
  const levels = new Map<string, LevelColumn>();
  const labels = new Map<string, LevelColumn>();
  values.forEach((column, position) => {
    if (column instanceof Float64Array) {
      numeric.set(request.numeric[position], column);
      return;
    }
    const place = position - request.numeric.length;
    const beyond = place - request.levels.length;
    if (beyond < 0) levels.set(request.levels[place].column, { levels: permitted[place], codes: column });
    else labels.set(request.labels?.[beyond] ?? '', { levels: labelled[beyond], codes: column });
  });
  return { numeric, levels, ...(labels.size === 0 ? {} : { labels }) };
}
