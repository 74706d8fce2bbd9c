import { existsSync, readdirSync, readFileSync } from 'node:fs';
import { join } from 'node:path';
import { DuckDBInstance } from '@duckdb/node-api';
import { describe, expect, test } from 'vitest';
import { readTable } from '../../worker/source/read-table.js';
import { splitTable } from '../../worker/source/split.js';
import { failureOf, newFolder, request, soundValue, writeText } from '../support/tables.js';

const split = (name: string, text: string, by = 'site') => {
  const folder = newFolder();
  const table = writeText(folder, name, text);
  return { folder, parts: splitTable({ table, by, folder: join(folder, 'parts') }) };
};

describe('splitting', () => {
  test('CSV rows keep their order and every character of their values', async () => {
    const text =
      'site,x,Note,note\nharrowmere,0.10,"a, ""b""",\ncastlefen,007,,z\nharrowmere,1e-3, padded ,"two\nlines"\n';
    const { folder, parts } = split('all.csv', text);
    expect(soundValue(await parts)).toEqual([
      { site: 'harrowmere', file: join(folder, 'parts', 'harrowmere.csv'), rows: 2 },
      { site: 'castlefen', file: join(folder, 'parts', 'castlefen.csv'), rows: 1 },
    ]);
    expect(readFileSync(join(folder, 'parts', 'harrowmere.csv'), 'utf8')).toBe(
      'site,x,Note,note\nharrowmere,0.10,"a, ""b""",\nharrowmere,1e-3, padded ,"two\nlines"\n',
    );
    expect(readFileSync(join(folder, 'parts', 'castlefen.csv'), 'utf8')).toBe(
      'site,x,Note,note\ncastlefen,007,,z\n',
    );
  });

  test('long tables keep their order', async () => {
    const lines = Array.from({ length: 30_000 }, (_, i) => `${i % 2 === 0 ? 'a' : 'b'},${i}`);
    const { folder, parts } = split('all.csv', `site,x\n${lines.join('\n')}\n`);
    expect(soundValue(await parts).map((part) => part.rows)).toEqual([15_000, 15_000]);
    const odd = lines.filter((line) => line.startsWith('b'));
    expect(readFileSync(join(folder, 'parts', 'b.csv'), 'utf8')).toBe(`site,x\n${odd.join('\n')}\n`);
  });

  test('JSON lines stay as they are', async () => {
    const lines = ['{"site":"a","x":1.0e0}', '{ "x": 0.10, "site": "b" }', '{"site":"a","x":null}'];
    const { folder, parts } = split('all.jsonl', `${lines.join('\n')}\n`);
    expect(soundValue(await parts).map(({ site, rows }) => [site, rows])).toEqual([
      ['a', 2],
      ['b', 1],
    ]);
    expect(readFileSync(join(folder, 'parts', 'a.jsonl'), 'utf8')).toBe(`${lines[0]}\n${lines[2]}\n`);
  });

  test('Parquet keeps its types', async () => {
    const folder = newFolder();
    const table = join(folder, 'all.parquet');
    const connection = await (await DuckDBInstance.create(':memory:')).connect();
    await connection.run(
      `copy (select * from (values (7, 0.1::double), (8, 0.2), (7, 0.3)) t(site, x)) to '${table}' (format parquet)`,
    );
    connection.closeSync();
    const parts = soundValue(await splitTable({ table, by: 'site', folder }));
    expect(parts.map(({ site, rows }) => [site, rows])).toEqual([
      ['7', 2],
      ['8', 1],
    ]);
    const read = await readTable({ kind: 'parquet', path: parts[0].file }, request({ numeric: ['x'] }));
    expect(soundValue(read).numeric.get('x')).toEqual(Float64Array.of(0.1, 0.3));
  });
});

describe('refusals', () => {
  test.each(['../up', 'a/b', '.hidden', 'a b', '', 'é', 'a\\b'])(
    'a site named %j writes nothing',
    async (name) => {
      for (const [file, text] of [
        ['all.csv', `site,x\ngood,1\n"${name}",2\n`],
        ['all.jsonl', `{"site":"good"}\n${JSON.stringify({ site: name })}\n`],
      ] as const) {
        const { folder, parts } = split(file, text);
        expect(failureOf(await parts)).toMatchObject({
          code: name === '' ? 'value-missing' : 'field-value',
          where: { row: 2, column: 'site' },
        });
        expect(readdirSync(join(folder, 'parts'))).toEqual([]);
        expect(existsSync(join(folder, 'up.csv'))).toBe(false);
      }
    },
  );

  test('a folder that cannot be made', async () => {
    const folder = newFolder();
    const table = writeText(folder, 'all.csv', 'site\na\n');
    expect(failureOf(await splitTable({ table, by: 'site', folder: table })).code).toBe('state-unwritable');
  });

  test('sites that differ by case only', async () => {
    expect(failureOf(await split('all.csv', 'site\nA\na\n').parts).code).toBe('field-value');
  });

  test.each(['all.csv', 'all.jsonl'])('a column that %s does not have', async (file) => {
    const text = file.endsWith('csv') ? 'site,x\na,1\n' : '{"site":"a"}\n';
    expect(failureOf(await split(file, text, 'sites').parts).code).toBe('column-missing');
  });

  test('a missing table, an empty one, another kind', async () => {
    const folder = newFolder();
    const missing = await splitTable({ table: join(folder, 'no.csv'), by: 'site', folder });
    expect(failureOf(missing).code).toBe('table-missing');
    expect(failureOf(await split('all.csv', 'site\n').parts).code).toBe('table-empty');
    expect(failureOf(await split('all.xlsx', 'PK').parts).code).toBe('not-supported');
  });
});
