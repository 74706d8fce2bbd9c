import { mkdir } from 'node:fs/promises';
import { extname, join } from 'node:path';
import { type Checked, fail, type Place, succeed } from '../../protocol/failure.js';
import { textSql } from './column-sql.js';
import { type Engine, openEngine, sqlText, textRows } from './duckdb.js';
import { missingColumn, openRelation, type Relation } from './relation.js';
import { partUnwritable, splitLines } from './split-lines.js';
import { siteFileName } from './split-name.js';
import type { TableSource } from './table.js';

export interface SplitPart {
  readonly site: string;
  readonly file: string;
  readonly rows: number;
}

/**
 * Splits one table (.csv, .parquet, .jsonl or .ndjson) by a column into one file per site, `folder/SITE.EXT`, rows in
 * their order and every value as it stands in the source. Sites come in the order of their first row.
 *
 * Fails like `readTable`, with `value-missing` for a row without a site, `field-value` for a site that cannot be a
 * file name, `not-supported` for another extension. Nothing is written before every site name has been checked.
 */
export async function splitTable(options: {
  table: string;
  by: string;
  folder: string;
}): Promise<Checked<SplitPart[]>> {
  const { table, by, folder } = options;
  const kind = kindOf(table);
  if (kind === null)
    return fail('not-supported', 'A table to split is a .csv, .parquet, .jsonl or .ndjson file.', {
      where: { file: table },
    });
  try {
    await mkdir(folder, { recursive: true });
  } catch (error) {
    const words = error instanceof Error ? error.message : String(error);
    return fail('state-unwritable', `The folder cannot be made: ${words}.`, {
      where: { file: folder },
      remedy: 'Name another folder.',
    });
  }
  if (kind === 'jsonl') return splitLines(options);
  const engine = await openEngine({ threads: 2 });
  try {
    const relation = await openRelation(engine, { kind, path: table }, [by]);
    if (!relation.ok) return relation;
    const absent = missingColumn([...relation.value.columns.keys()], [by], relation.value.where);
    if (absent !== null) return absent;
    return await splitRelation(engine, relation.value, kind, options);
  } finally {
    engine.close();
  }
}

type SplitKind = Exclude<TableSource['kind'], 'query'>;

function kindOf(table: string): SplitKind | null {
  const kinds: Readonly<Record<string, SplitKind>> = {
    '.csv': 'csv',
    '.parquet': 'parquet',
    '.jsonl': 'jsonl',
    '.ndjson': 'jsonl',
  };
  return kinds[extname(table).toLowerCase()] ?? null;
}

async function splitRelation(
  engine: Engine,
  relation: Relation,
  kind: 'csv' | 'parquet',
  { table, by, folder }: { table: string; by: string; folder: string },
): Promise<Checked<SplitPart[]>> {
  const column = relation.columns.get(by);
  if (column === undefined) throw new Error(`the relation has no column ${by}`);
  const site = textSql(column);
  const where: Place = { file: table, column: by };
  const found = await textRows(
    engine,
    `select site, count(*), min(r) from (select ${site} as site, row_number() over () as r from ${relation.from}) ` +
      'group by site order by min(r)',
    where,
  );
  if (!found.ok) return found;
  if (found.value.length === 0) return fail('table-empty', 'The table has no rows.', { where });

  const parts: SplitPart[] = [];
  for (const [name, rows, firstRow] of found.value) {
    const checked = siteFileName(
      name,
      parts.map((part) => part.site),
      { ...where, row: Number(firstRow) },
    );
    if (!checked.ok) return checked;
    const file = join(folder, `${checked.value}.${kind}`);
    parts.push({ site: checked.value, file, rows: Number(rows) });
  }
  for (const part of parts) {
    const written = await textRows(engine, copySql(relation, kind, site, part), { file: part.file });
    // All rows were read once, for the sites: what fails here is the writing.
    if (!written.ok) return partUnwritable(part.file);
  }
  return succeed(parts);
}

function copySql(relation: Relation, kind: 'csv' | 'parquet', site: string, part: SplitPart): string {
  const rows = `from ${relation.from} where ${site} = ${sqlText(part.site)}`;
  if (kind === 'parquet') return `copy (select * ${rows}) to ${sqlText(part.file)} (format parquet)`;
  const columns = [...relation.columns];
  // the header goes in as a row of text: DuckDB would rename columns that differ by case only
  const header = columns.map(([name, { sql }]) => `${sqlText(name)} as ${sql}`).join(', ');
  const values = columns.map(([, { sql }]) => sql).join(', ');
  return `copy (select ${header} union all select ${values} ${rows}) to ${sqlText(part.file)} (format csv, header false)`;
}
