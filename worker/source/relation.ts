import { stat } from 'node:fs/promises';
import { type Checked, fail, type Place, succeed } from '../../protocol/failure.js';
import { nearestName } from '../../protocol/specification/nearest.js';
import { readCsvHeader } from './csv-header.js';
import { type Engine, sqlName, sqlPath, sqlText, textRows, unreadable } from './duckdb.js';
import type { TableSource } from './table.js';

/** A source as SQL sees it. */
export interface Relation {
  /** What stands after FROM. */
  readonly from: string;
  /** Columns by exact name. */
  readonly columns: ReadonlyMap<string, RelationColumn>;
  readonly where: Place;
}

export interface RelationColumn {
  /** The value as a double, null where missing or not a number: `number` columns have no text to misread. */
  readonly sql: string;
  readonly type: 'number' | 'text';
}

// DECIMAL and 128-bit integers go through their text, which DuckDB turns into the nearest double
const numberTypes = new Set([
  'DOUBLE',
  'FLOAT',
  'TINYINT',
  'SMALLINT',
  'INTEGER',
  'BIGINT',
  'UTINYINT',
  'USMALLINT',
  'UINTEGER',
  'UBIGINT',
]);

/**
 * Finds a source and its columns. `used` are the columns that will be read: JSON lines have no header, so that only
 * these are looked for there, and a name that no line has shows as all values missing (see `jsonNames`).
 *
 * Fails with `table-missing`, `table-empty`, `header-duplicate`, `table-unreadable`.
 */
export async function openRelation(
  engine: Engine,
  source: TableSource,
  used: readonly string[],
): Promise<Checked<Relation>> {
  if (source.kind === 'query') return queryRelation(engine, source.query);
  const where = { file: source.path };
  const found = await fileExists(source.path);
  if (!found && source.kind !== 'parquet') return missing(where);
  switch (source.kind) {
    case 'csv':
      return csvRelation(source.path);
    case 'jsonl':
      return succeed(jsonRelation(source.path, used));
    case 'parquet': {
      const path = found ? sqlPath(source.path) : sqlText(source.path);
      if (!found) {
        const files = await textRows(engine, `select file from glob(${path}) limit 1`, where);
        if (!files.ok) return files;
        if (files.value.length === 0) return missing(where);
      }
      return described(engine, `read_parquet(${path})`, where, null);
    }
  }
}

/** A failure for the first column of `used` that the relation does not have. */
export function missingColumn(
  names: readonly string[],
  used: readonly string[],
  where: Place,
): ReturnType<typeof fail> | null {
  const column = used.find((name) => !names.includes(name));
  if (column === undefined) return null;
  const near = nearestName(column, names);
  const listed = names.slice(0, columnsListedMost).join(', ');
  const more = names.length > columnsListedMost ? ` and ${names.length - columnsListedMost} more` : '';
  return fail('column-missing', `The table has no column "${column}"; it has ${listed}${more}.`, {
    where: { ...where, column },
    remedy:
      near === null
        ? 'Rename the column in the table, or read it through a query that names it so.'
        : `Did you mean "${near}"?`,
  });
}

const columnsListedMost = 40;

/** The keys of a JSON lines file: read only when a column has no value, because it takes a pass over the file. */
export async function jsonNames(engine: Engine, path: string): Promise<Checked<string[]>> {
  const from = `read_ndjson_objects(${sqlPath(path)})`;
  const rows = await textRows(
    engine,
    `select distinct unnest(json_keys(json)) as k from ${from} order by k`,
    {
      file: path,
    },
  );
  return rows.ok ? succeed(rows.value.map((row) => row[0] ?? '')) : rows;
}

async function fileExists(path: string): Promise<boolean> {
  try {
    return (await stat(path)).isFile();
  } catch {
    return false;
  }
}

const missing = (where: Place): ReturnType<typeof fail> =>
  fail('table-missing', 'There is no such file.', {
    where,
    remedy: 'Correct the table entry of the site file; paths are taken from its folder.',
  });

async function csvRelation(path: string): Promise<Checked<Relation>> {
  const header = await readCsvHeader(path);
  if (!header.ok) return header;
  const { names, delimiter } = header.value;
  const where = { file: path };
  const twice = duplicate(names);
  if (twice !== null) return headerDuplicate(twice, where);
  // positional names, because DuckDB does not tell names apart by case
  const declared = names.map((_, position) => `'c${position}': 'VARCHAR'`).join(', ');
  const from =
    `read_csv(${sqlPath(path)}, auto_detect = false, header = true, delim = ${sqlText(delimiter)}, quote = '"', ` +
    `escape = '"', comment = '', strict_mode = true, null_padding = false, columns = {${declared}})`;
  const columns = names.map((name, position): [string, RelationColumn] => [
    name,
    { sql: `c${position}`, type: 'text' },
  ]);
  return succeed({ from, columns: new Map(columns), where });
}

function jsonRelation(path: string, used: readonly string[]): Relation {
  const declared = used.map((name) => `${sqlText(name)}: 'VARCHAR'`).join(', ');
  const from = `read_json(${sqlPath(path)}, format = 'newline_delimited', records = true, columns = {${declared}})`;
  const columns = used.map((name): [string, RelationColumn] => [name, { sql: sqlName(name), type: 'text' }]);
  return { from, columns: new Map(columns), where: { file: path } };
}

async function queryRelation(engine: Engine, query: string): Promise<Checked<Relation>> {
  const where = { field: 'table.query' };
  const bare = query.replace(/[\s;]+$/, '');
  let names: string[];
  try {
    const prepared = await engine.connection.prepare(bare);
    names = Array.from({ length: prepared.columnCount }, (_, position) => prepared.columnName(position));
    prepared.destroySync();
  } catch (error) {
    return unreadable(error, where);
  }
  // the line end closes a trailing comment
  return described(engine, `(${bare}\n)`, where, names);
}

/** @param names as the query spells them; null: as DuckDB describes them. */
async function described(
  engine: Engine,
  from: string,
  where: Place,
  names: readonly string[] | null,
): Promise<Checked<Relation>> {
  const rows = await textRows(engine, `describe select * from ${from}`, where);
  if (!rows.ok) return rows;
  const twice = duplicate(names ?? []);
  if (twice !== null) return headerDuplicate(twice, where);
  const columns = rows.value.map(([described, type], position): [string, RelationColumn] => [
    names?.[position] ?? described ?? '',
    {
      sql: numberTypes.has(type ?? '')
        ? sqlName(described ?? '')
        : `cast(${sqlName(described ?? '')} as varchar)`,
      type: numberTypes.has(type ?? '') ? 'number' : 'text',
    },
  ]);
  return succeed({ from, columns: new Map(columns), where });
}

/** Empty names do not count: spreadsheets leave them behind. */
const duplicate = (names: readonly string[]): string | null =>
  names.find((name, position) => name !== '' && names.indexOf(name) !== position) ?? null;

const headerDuplicate = (column: string, where: Place): ReturnType<typeof fail> =>
  fail('header-duplicate', `Two columns have the name "${column}".`, {
    where: { ...where, column },
    remedy: 'Rename or remove one of them.',
  });
