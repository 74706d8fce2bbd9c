import { splitTable } from '../source/split.js';
import { EXIT, type ExitCode } from './exit-codes.js';
import { counted, giveUp, say } from './terminal.js';

export interface SplitOptions {
  readonly by: string;
  readonly out: string;
  readonly json: boolean;
}

/** Splits one table into one file for each value of a column. */
export async function split(table: string, options: SplitOptions): Promise<ExitCode> {
  const parts = await splitTable({ table, by: options.by, folder: options.out });
  if (!parts.ok) return giveUp([parts.failure]);
  if (options.json) say([JSON.stringify(parts.value)]);
  else for (const { site, file, rows } of parts.value) say([`${site}: ${counted(rows, 'row')} in ${file}`]);
  return EXIT.ok;
}
