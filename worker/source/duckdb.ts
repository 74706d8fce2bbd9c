import type { DuckDBConnection, DuckDBResult } from '@duckdb/node-api';
import { type Checked, fail, type Place, succeed } from '../../protocol/failure.js';

/** A connection to an in-memory DuckDB that nothing else shares. */
export interface Engine {
  readonly connection: DuckDBConnection;
  close(): void;
}

/**
 * Opens DuckDB with nothing that reaches beyond the custodian's files: no extension is fetched, no row is spilled to
 * disk. Rows keep their order in the source. Loaded on first use, because the import costs a quarter of a second.
 */
export async function openEngine(options: {
  readonly threads: number;
  /** Most memory of its own, bytes; absent: as DuckDB chooses. */
  readonly memoryBytes?: number;
}): Promise<Engine> {
  const { DuckDBInstance } = await import('@duckdb/node-api');
  const instance = await DuckDBInstance.create(':memory:', {
    autoinstall_known_extensions: 'false',
    autoload_known_extensions: 'false',
    temp_directory: '',
    preserve_insertion_order: 'true',
    threads: String(options.threads),
    ...(options.memoryBytes === undefined ? {} : { memory_limit: `${Math.floor(options.memoryBytes)}B` }),
  });
  const connection = await instance.connect();
  return {
    connection,
    close: () => {
      connection.closeSync();
      instance.closeSync();
    },
  };
}

/** A text literal of SQL. */
export const sqlText = (text: string): string => `'${text.replaceAll("'", "''")}'`;

/** A quoted SQL identifier. */
export const sqlName = (name: string): string => `"${name.replaceAll('"', '""')}"`;

/** A path as a SQL literal in which no character is a pattern. */
export const sqlPath = (path: string): string => sqlText(path.replace(/[[*?]/g, (special) => `[${special}]`));

const wordsMost = 300;

/** 'table-unreadable' with the words of DuckDB or of the system, cut before its advice on options that a custodian cannot set. */
export function unreadable(error: unknown, where: Place): ReturnType<typeof fail> {
  const words = (error instanceof Error ? error.message : String(error)).split('\n').slice(0, 3).join(' ');
  const cut = words.length > wordsMost ? `${words.slice(0, wordsMost)}…` : words;
  return fail('table-unreadable', `The table could not be read: ${cut.trim()}.`, { where });
}

/** Rows of a small result as text, null where there is no value. */
export async function textRows(
  engine: Engine,
  sql: string,
  where: Place,
): Promise<Checked<(string | null)[][]>> {
  try {
    const reader = await engine.connection.runAndReadAll(sql);
    const rows = reader.getRowsJson() as unknown[][];
    return succeed(rows.map((row) => row.map((cell) => (cell === null ? null : String(cell)))));
  } catch (error) {
    return unreadable(error, where);
  }
}

/** Starts a statement whose rows come in chunks while it runs, so that memory does not grow with the table. */
export async function streamRows(engine: Engine, sql: string, where: Place): Promise<Checked<DuckDBResult>> {
  try {
    return succeed(await engine.connection.stream(sql));
  } catch (error) {
    return unreadable(error, where);
  }
}
