import { once } from 'node:events';
import { createReadStream, createWriteStream, type WriteStream } from 'node:fs';
import { stat } from 'node:fs/promises';
import { join } from 'node:path';
import { createInterface } from 'node:readline';
import { finished } from 'node:stream/promises';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { missingColumn } from './relation.js';
import type { SplitPart } from './split.js';
import { siteFileName } from './split-name.js';

/** JSON lines are split as text, so that every line stays as it is. Two passes: names are checked before any is used. */
export async function splitLines(options: {
  table: string;
  by: string;
  folder: string;
}): Promise<Checked<SplitPart[]>> {
  const { table, by, folder } = options;
  const found = await stat(table).catch(() => null);
  if (!found?.isFile()) return fail('table-missing', 'There is no such file.', { where: { file: table } });
  const rowsOf = new Map<string, number>();
  let row = 0;
  for await (const line of linesOf(table)) {
    row++;
    const site = siteOf(line, by, row, table);
    if (!site.ok) return site;
    const checked = siteFileName(site.value, [...rowsOf.keys()], { file: table, row, column: by });
    if (!checked.ok) return checked;
    rowsOf.set(checked.value, (rowsOf.get(checked.value) ?? 0) + 1);
  }
  if (row === 0) return fail('table-empty', 'The table has no rows.', { where: { file: table } });

  const parts = [...rowsOf].map(([site, rows]) => ({ site, file: join(folder, `${site}.jsonl`), rows }));
  try {
    await writeParts(table, by, parts);
  } catch (error) {
    if ((error as NodeJS.ErrnoException).code === undefined) throw error;
    return partUnwritable(folder);
  }
  return succeed(parts);
}

/** Whatever the reason in detail, a part is there whole or the command says that it is not. */
export const partUnwritable = (file: string): Checked<never> =>
  fail('state-unwritable', 'The part cannot be written.', {
    remedy: 'Check the space and the rights of the folder.',
    where: { file },
  });

async function writeParts(table: string, by: string, parts: readonly SplitPart[]): Promise<void> {
  const outputs = new Map(parts.map(({ site, file }) => [site, createWriteStream(file)]));
  const ends = Promise.all([...outputs.values()].map((output) => finished(output)));
  // It may fail while a line is waited for, which then fails too.
  ends.catch(() => undefined);
  for await (const line of linesOf(table)) {
    const site = siteOf(line, by, 0, table);
    const output = site.ok ? outputs.get(site.value ?? '') : undefined;
    if (output === undefined) throw new Error('the table changed while it was split');
    await writeLine(output, line);
  }
  for (const output of outputs.values()) output.end();
  await ends;
}

async function* linesOf(table: string): AsyncGenerator<string> {
  for await (const line of createInterface({ input: createReadStream(table), crlfDelay: Infinity }))
    if (line.trim() !== '') yield line;
}

function siteOf(line: string, by: string, row: number, table: string): Checked<string | null> {
  let record: unknown;
  try {
    record = JSON.parse(line);
  } catch {
    record = null;
  }
  if (typeof record !== 'object' || record === null || Array.isArray(record))
    return fail('table-unreadable', 'The line is not a JSON object.', { where: { file: table, row } });
  const absent = row === 1 ? missingColumn(Object.keys(record), [by], { file: table }) : null;
  if (absent !== null) return absent;
  const value = (record as Record<string, unknown>)[by];
  return succeed(value === undefined || value === null ? null : String(value));
}

async function writeLine(output: WriteStream, line: string): Promise<void> {
  if (!output.write(`${line}\n`)) await once(output, 'drain');
}
