import { type FileHandle, open } from 'node:fs/promises';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { unreadable } from './duckdb.js';

export interface CsvHeader {
  readonly names: readonly string[];
  readonly delimiter: string;
}

const headerBytesMost = 1024 * 1024;

/**
 * Reads the header record of a CSV file (RFC 4180). The delimiter is a comma, or a semicolon or tab where the header
 * holds no comma outside quotes: nothing is guessed from the rows.
 *
 * Fails with `table-empty` (no header), `table-unreadable` (not to be opened, not text, or no end of the header within 1 MiB).
 */
export async function readCsvHeader(path: string): Promise<Checked<CsvHeader>> {
  const where = { file: path };
  let handle: FileHandle;
  try {
    handle = await open(path, 'r');
  } catch (error) {
    return unreadable(error, where);
  }
  let text: string;
  try {
    const buffer = Buffer.alloc(headerBytesMost);
    const { bytesRead } = await handle.read(buffer, 0, headerBytesMost, 0);
    text = buffer.toString('utf8', 0, bytesRead).replace(/^\ufeff/, '');
    if (text.includes('\0'))
      return fail('table-unreadable', 'The file is not UTF-8 text.', {
        where,
        remedy: 'Save the table as UTF-8 CSV, uncompressed.',
      });
    const end = headerEnd(text);
    if (end === null && bytesRead === headerBytesMost)
      return fail('table-unreadable', 'The header does not end within the first 1 MiB of the file.', {
        where,
        remedy: 'Check that the first line holds the column names and that its quotes are closed.',
      });
    text = text.slice(0, end ?? text.length);
  } finally {
    await handle.close();
  }
  if (text.trim() === '')
    return fail('table-empty', 'The file has no header and no rows.', {
      where,
      remedy: 'The first line holds the column names.',
    });
  const delimiter = delimiterOf(text);
  return succeed({ names: fieldsOf(text, delimiter), delimiter });
}

/** Index of the first line end outside quotes. */
function headerEnd(text: string): number | null {
  let quoted = false;
  for (let i = 0; i < text.length; i++) {
    if (text[i] === '"') quoted = !quoted;
    else if (!quoted && (text[i] === '\n' || text[i] === '\r')) return i;
  }
  return null;
}

function delimiterOf(header: string): string {
  const bare = header.replace(/"[^"]*"/g, '');
  return [',', ';', '\t'].find((candidate) => bare.includes(candidate)) ?? ',';
}

function fieldsOf(header: string, delimiter: string): string[] {
  const fields: string[] = [];
  let field = '';
  let quoted = false;
  for (let i = 0; i < header.length; i++) {
    const character = header[i];
    if (character === '"') {
      if (quoted && header[i + 1] === '"') {
        field += '"';
        i++;
      } else quoted = !quoted;
    } else if (character === delimiter && !quoted) {
      fields.push(field);
      field = '';
    } else field += character;
  }
  fields.push(field);
  return fields;
}
