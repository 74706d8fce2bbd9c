import { stat } from 'node:fs/promises';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import {
  createEnumSql,
  createLabelEnumSql,
  labelCodeSql,
  levelsSql,
  numericSql,
  textSql,
} from './column-sql.js';
import { diagnose } from './diagnose.js';
import { type Engine, openEngine, textRows } from './duckdb.js';
import { inFolder } from './in-folder.js';
import { jsonNames, missingColumn, openRelation, type Relation, type RelationColumn } from './relation.js';
import { type Scan, type ScanColumn, type ScannedRows, scanRelation } from './scan.js';
import type { LevelsRequest, Table, TableRequest, TableSource } from './table.js';
import { partOf, type ValueLists, WholeTable } from './table-parts.js';

// a bound on memory: DuckDB buffers tens of megabytes of CSV per thread
const fileThreads = 4;
// with one thread a query without `order by` still gives its rows in the same order each time
const queryThreads = 1;
/** DuckDB's threads where the rows themselves are not kept in memory, and its least memory in bytes. */
const partThreads = 1;
const partEngineBytesLeast = 256e6;

/**
 * Reads the columns asked for. Empty text is a missing value; numbers are the doubles nearest to their decimal form.
 *
 * Fails with `table-missing`, `table-empty`, `table-unreadable` (with DuckDB's words), `header-duplicate`,
 * `column-missing`, `column-not-numeric`, `value-not-finite`, `value-missing` (unless dropped), `level-unknown`,
 * `response-range` (a third class); the last five name the first row and column. Messages quote values of the table: they are for the custodian,
 * and only their code may leave the site. `table-unreadable` also where the columns take more than `bytesMost`.
 */
export async function readTable(
  source: TableSource,
  request: TableRequest,
  bytesMost = Number.POSITIVE_INFINITY,
): Promise<Checked<Table>> {
  const threads = source.kind === 'query' ? queryThreads : fileThreads;
  return withEngine(source, { threads }, async (engine) => {
    const whole = new WholeTable(request, bytesMost);
    const read = await scanSource(engine, source, request, (rows) => whole.take(rows));
    return read.ok ? succeed(whole.finish(read.value.scan, read.value.lists)) : read;
  });
}

/**
 * The same columns some thousand rows at a time: `take` is given the rows used as tables of their own, each with its
 * row numbers; what it fails with ends the reading. DuckDB holds row groups of Parquet files whole, and has half of
 * `memoryBytes` for it.
 */
export async function readInParts(
  source: TableSource,
  request: TableRequest,
  memoryBytes: number,
  take: (part: Table) => Checked<null>,
): Promise<Checked<{ readonly rowCount: number; readonly rowsDropped: number }>> {
  const options = { threads: partThreads, memoryBytes: Math.max(memoryBytes / 2, partEngineBytesLeast) };
  return withEngine(source, options, async (engine) => {
    const read = await scanSource(engine, source, request, (rows, lists) =>
      rows.used.length === 0 ? succeed(null) : take(partOf(rows, request, lists)),
    );
    if (read.ok) return succeed(read.value.scan);
    const { failure } = read;
    return failure.code === 'table-unreadable' && failure.remedy === undefined
      ? { ok: false, failure: { ...failure, remedy: MEMORY_REMEDY } }
      : read;
  });
}

const MEMORY_REMEDY =
  'Where DuckDB is out of memory: give more --memory, or write the Parquet file with smaller row groups.';

async function withEngine<T>(
  source: TableSource,
  options: Parameters<typeof openEngine>[0],
  read: (engine: Engine) => Promise<Checked<T>>,
): Promise<Checked<T>> {
  const run = async (): Promise<Checked<T>> => {
    const engine = await openEngine(options);
    try {
      return await read(engine);
    } finally {
      engine.close();
    }
  };
  if (source.kind !== 'query') return run();
  if (!(await isFolder(source.folder)))
    return fail('table-missing', 'The folder that the query is run in is not there.', {
      where: { file: source.folder },
      remedy: 'A query runs in the folder of its site file.',
    });
  return inFolder(source.folder, run);
}

const isFolder = (path: string): Promise<boolean> =>
  stat(path).then(
    (found) => found.isDirectory(),
    () => false,
  );

async function scanSource(
  engine: Engine,
  source: TableSource,
  request: TableRequest,
  take: (rows: ScannedRows, lists: ValueLists) => Checked<null>,
): Promise<Checked<{ readonly scan: Scan; readonly lists: ValueLists }>> {
  const labels = request.labels ?? [];
  const used = [...new Set([...request.numeric, ...request.levels.map(({ column }) => column), ...labels])];
  const relation = await openRelation(engine, source, used);
  if (!relation.ok) return relation;
  const absent = missingColumn([...relation.value.columns.keys()], used, relation.value.where);
  if (absent !== null) return absent;
  const permitted = await permittedLevels(engine, relation.value, request.levels);
  if (!permitted.ok) return permitted;

  const labelled = await labelsOf(engine, relation.value, labels);
  if (!labelled.ok) return labelled;
  const lists = { permitted: permitted.value, labelled: labelled.value };

  const columns = scanColumns(relation.value, request, permitted.value);
  const scan = await scanRelation(engine, relation.value, columns, request, (rows) => take(rows, lists));
  if (!scan.ok) return scan;
  const found = scan.value;
  if (
    source.kind === 'jsonl' &&
    (found.found === 'missing' || (found.found === null && found.rowCount === 0))
  ) {
    const names = await jsonNames(engine, source.path);
    if (!names.ok) return names;
    const unknown = names.value.length === 0 ? null : missingColumn(names.value, used, relation.value.where);
    if (unknown !== null) return unknown;
  }
  if (found.found !== null) {
    const position = found.column - request.numeric.length;
    const levels =
      position < 0 || position >= request.levels.length
        ? null
        : { request: request.levels[position], permitted: permitted.value[position] };
    return {
      ok: false,
      failure: await diagnose(engine, relation.value, columns[found.column], found, levels),
    };
  }
  if (found.rowsSeen === 0)
    return fail('table-empty', 'The table has no rows.', {
      where: relation.value.where,
      remedy: 'Check that the table entry of the site file names the right table.',
    });
  return succeed({ scan: found, lists });
}

/** The levels of each request in code order: those asked for and, where one more is admitted, the first other value. */
async function permittedLevels(
  engine: Engine,
  relation: Relation,
  requests: readonly LevelsRequest[],
): Promise<Checked<string[][]>> {
  const permitted: string[][] = [];
  for (const [position, request] of requests.entries()) {
    const levels = [...request.levels];
    if (request.others === 'one') {
      const other = await firstOther(engine, relation, request, `asked${position}`);
      if (!other.ok) return other;
      if (other.value !== null) levels.push(other.value);
    }
    const created = await textRows(engine, createEnumSql(enumName(position), levels), relation.where);
    if (!created.ok) return created;
    permitted.push(levels);
  }
  return succeed(permitted);
}

async function firstOther(
  engine: Engine,
  relation: Relation,
  request: LevelsRequest,
  asked: string,
): Promise<Checked<string | null>> {
  const created = await textRows(engine, createEnumSql(asked, request.levels), relation.where);
  if (!created.ok) return created;
  const column = columnOf(relation, request.column);
  const rows = await textRows(
    engine,
    `select ${textSql(column)} from ${relation.from} where ${levelsSql(column, request.levels, asked)} = -1 limit 1`,
    relation.where,
  );
  return rows.ok ? succeed(rows.value[0]?.[0] ?? null) : rows;
}

/** Every label of each column, in the order of the codes of its type. */
async function labelsOf(
  engine: Engine,
  relation: Relation,
  names: readonly string[],
): Promise<Checked<string[][]>> {
  const found: string[][] = [];
  for (const [position, name] of names.entries()) {
    const column = columnOf(relation, name);
    const type = labelEnumName(position);
    const created = await textRows(engine, createLabelEnumSql(type, column, relation.from), relation.where);
    if (!created.ok) return created;
    const listed = await textRows(
      engine,
      `select unnest(enum_range(null::${type}))::varchar`,
      relation.where,
    );
    if (!listed.ok) return listed;
    found.push(listed.value.map(([label]) => labelText(label ?? '')));
  }
  return succeed(found);
}

/** A number is spelled as JavaScript spells it: 1, not 1.0. */
const labelText = (label: string): string =>
  label.trim() !== '' && Math.abs(Number(label)) <= Number.MAX_SAFE_INTEGER ? String(Number(label)) : label;

function columnOf(relation: Relation, name: string): RelationColumn {
  const column = relation.columns.get(name);
  if (column === undefined) throw new Error(`the relation has no column ${name}`);
  return column;
}

const labelEnumName = (position: number): string => `labels${position}`;

const enumName = (position: number): string => `levels${position}`;

/** Numeric columns first, then columns of levels and of labels, in the order of the request. */
function scanColumns(
  relation: Relation,
  request: TableRequest,
  permitted: readonly (readonly string[])[],
): ScanColumn[] {
  return [
    ...request.numeric.map(
      (name): ScanColumn => ({ name, kind: 'numeric', sql: numericSql(columnOf(relation, name)) }),
    ),
    ...request.levels.map(
      ({ column }, position): ScanColumn => ({
        name: column,
        kind: 'levels',
        sql: levelsSql(columnOf(relation, column), permitted[position], enumName(position)),
      }),
    ),
    ...(request.labels ?? []).map(
      (name, position): ScanColumn => ({
        name,
        kind: 'levels',
        sql: labelCodeSql(columnOf(relation, name), labelEnumName(position)),
      }),
    ),
  ];
}
