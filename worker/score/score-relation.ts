import { type Checked, fail, type Place, succeed } from '../../protocol/failure.js';
import { type Engine, sqlName, sqlPath, sqlText } from '../source/duckdb.js';
import { jsonNames, openRelation, type RelationColumn } from '../source/relation.js';

export type ScoreFormat = 'csv' | 'parquet' | 'jsonl';

/** The table to score as SQL sees it, with every column it has. */
export interface ScoreRelation {
  readonly from: string;
  readonly columns: ReadonlyMap<string, RelationColumn>;
  readonly where: Place;
  /** A column as it goes into an output of this format: its values as they stand in the table. */
  written(name: string, format: ScoreFormat): string;
}

/**
 * Opens a table with all its columns. Fails like `openRelation`; JSON lines without a line are `table-empty`.
 *
 * Values of CSV and JSON lines are text (JSON in a JSON output), since nothing in the file says more.
 */
export async function openScoreRelation(
  engine: Engine,
  kind: ScoreFormat,
  path: string,
): Promise<Checked<ScoreRelation>> {
  const opened = await openRelation(engine, { kind, path }, []);
  if (!opened.ok) return opened;
  if (kind !== 'jsonl') {
    const { from, columns, where } = opened.value;
    // an empty name is a column that spreadsheets leave behind
    const named = new Map([...columns].filter(([name]) => name !== ''));
    const sqlOf = kind === 'csv' ? (name: string) => named.get(name)?.sql ?? sqlName(name) : sqlName;
    return succeed({ from, columns: named, where, written: sqlOf });
  }
  const names = await jsonNames(engine, path);
  if (!names.ok) return names;
  const where = { file: path };
  if (names.value.length === 0)
    return fail('table-empty', 'No line of the file is a JSON object with a value.', { where });
  const declared = names.value.map((name) => `${sqlText(name)}: 'JSON'`).join(', ');
  const asText = (name: string) => `(${sqlName(name)} ->> '$')`;
  return succeed({
    from: `read_json(${sqlPath(path)}, format = 'newline_delimited', records = true, columns = {${declared}})`,
    columns: new Map(
      names.value.map((name): [string, RelationColumn] => [name, { sql: asText(name), type: 'text' }]),
    ),
    where,
    written: (name, format) => (format === 'jsonl' ? sqlName(name) : asText(name)),
  });
}
