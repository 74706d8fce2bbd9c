import { join } from 'node:path';
import { DuckDBInstance } from '@duckdb/node-api';
import { describe, expect, test } from 'vitest';
import { readTable } from '../../worker/source/read-table.js';
import type { TableRequest, TableSource } from '../../worker/source/table.js';
import { newFolder, request, soundValue, writeText } from '../support/tables.js';

const rows = [
  { breaks: 0, age_years: 12.5, material: 'pvc', grade: 2 },
  { breaks: 3, age_years: 0.1, material: 'cast-iron', grade: 1 },
  { breaks: 1, age_years: 0.30000000000000004, material: 'a "quoted", one', grade: 2 },
  { breaks: 1e22, age_years: -5e-324, material: "o'steel", grade: 3 },
  { breaks: 123456789012345680, age_years: 1.7976931348623157e308, material: 'pvc', grade: 1 },
];
const wanted = request({
  numeric: ['age_years', 'breaks'],
  levels: [
    { column: 'material', levels: ["o'steel", 'pvc', 'cast-iron', 'a "quoted", one'] },
    { column: 'grade', levels: ['1.0', '2', '3e0'] },
  ],
});

const csvText = (records: readonly Record<string, unknown>[]): string =>
  [Object.keys(records[0]), ...records.map((record) => Object.values(record))]
    .map((line) => line.map((cell) => `"${String(cell).replaceAll('"', '""')}"`).join(','))
    .join('\n');
const jsonText = (records: readonly Record<string, unknown>[]): string =>
  records.map((record) => JSON.stringify(record)).join('\n');

async function writeParquet(path: string, select: string): Promise<void> {
  const instance = await DuckDBInstance.create(':memory:');
  const connection = await instance.connect();
  await connection.run(`copy (${select}) to '${path.replaceAll("'", "''")}' (format parquet)`);
  connection.closeSync();
}

const csv = (text: string): TableSource => ({
  kind: 'csv',
  path: writeText(newFolder(), 'pipes.csv', text),
});

async function numbers(source: TableSource, column: string, partial: Partial<TableRequest> = {}) {
  const table = soundValue(await readTable(source, request({ numeric: [column], ...partial })));
  return [...(table.numeric.get(column) ?? [])];
}

describe('the same table in every form', () => {
  test('CSV, Parquet, JSON lines and a query give the same arrays to the bit', async () => {
    const folder = newFolder();
    writeText(folder, 'pipes.csv', csvText(rows));
    writeText(folder, 'pipes.jsonl', jsonText(rows));
    const literals = rows.map(
      (row) =>
        `(${row.breaks}::double, '${row.age_years}'::double, '${row.material.replaceAll("'", "''")}', ${row.grade})`,
    );
    const select = `select * from (values ${literals.join(', ')}) t(breaks, age_years, material, grade)`;
    await writeParquet(join(folder, 'pipes.parquet'), select);
    const sources: TableSource[] = [
      { kind: 'csv', path: join(folder, 'pipes.csv') },
      { kind: 'jsonl', path: join(folder, 'pipes.jsonl') },
      { kind: 'parquet', path: join(folder, 'pipes.parquet') },
      { kind: 'query', query: "select * from 'pipes.parquet' -- all of it", folder },
    ];
    for (const source of sources) {
      const table = soundValue(await readTable(source, wanted));
      expect(table.rowCount).toBe(5);
      expect(table.rowsDropped).toBe(0);
      expect(table.numeric.get('breaks')).toEqual(Float64Array.from(rows, (row) => row.breaks));
      expect(table.numeric.get('age_years')).toEqual(Float64Array.from(rows, (row) => row.age_years));
      expect(table.levels.get('material')).toEqual({
        levels: ["o'steel", 'pvc', 'cast-iron', 'a "quoted", one'],
        codes: Int32Array.of(1, 2, 3, 0, 1),
      });
      expect(table.levels.get('grade')).toEqual({
        levels: ['1.0', '2', '3e0'],
        codes: Int32Array.of(1, 0, 1, 2, 0),
      });
    }
  });

  test('integers, decimals and booleans of Parquet read as their numbers and words', async () => {
    const path = join(newFolder(), 'p.parquet');
    await writeParquet(
      path,
      'select 7::smallint as a, 12345678901234567.89::decimal(38, 2) as b, true as c, 0.1::float as d',
    );
    const table = soundValue(
      await readTable(
        { kind: 'parquet', path },
        request({ numeric: ['a', 'b', 'd'], levels: [{ column: 'c', levels: ['false', 'true'] }] }),
      ),
    );
    expect(table.numeric.get('a')).toEqual(Float64Array.of(7));
    expect(table.numeric.get('b')).toEqual(Float64Array.of(Number('12345678901234567.89')));
    expect(table.numeric.get('d')).toEqual(Float64Array.of(Math.fround(0.1)));
    expect(table.levels.get('c')?.codes).toEqual(Int32Array.of(1));
  });
});

describe('CSV', () => {
  test('decimal numbers become the nearest double', async () => {
    const texts = [
      '0.1',
      '9007199254740993',
      '2.2250738585072011e-308',
      '179769313486231580793e288',
      '.5',
      ' 4 ',
    ];
    expect(await numbers(csv(`x,y\n${texts.map((text) => `${text},0`).join('\n')}`), 'x')).toEqual(
      texts.map(Number),
    );
  });

  test.each([
    ['a byte order mark and CRLF', '\ufeffx,y\r\n1,2\r\n3,4\r\n'],
    ['semicolons', 'x;y\n1;2\n3;4\n'],
    ['tabs', 'x\ty\n1\t2\n3\t4'],
    ['a quoted header and empty lines', '"x","y, z"\n1,2\n\n3,4\n\n'],
    ['empty names of a spreadsheet', 'x,,\n1,,\n3,,\n'],
  ])('reads %s', async (_, text) => {
    expect(await numbers(csv(text), 'x')).toEqual([1, 3]);
  });

  test('a path may hold quotes and pattern characters', async () => {
    const folder = newFolder();
    const path = writeText(folder, "pipe's [x]*?.csv", 'x\n1\n');
    writeText(folder, "pipe's [x]more.csv", 'x\n2\n');
    expect(await numbers({ kind: 'csv', path }, 'x')).toEqual([1]);
  });

  test('columns that differ by case only are two columns', async () => {
    expect(await numbers(csv('age,AGE\n1,2\n'), 'AGE')).toEqual([2]);
  });

  test('long tables keep their order over every chunk', async () => {
    const count = 60_000;
    const text = `x,m\n${Array.from({ length: count }, (_, i) => `${i / 7},${i % 3}`).join('\n')}\n`;
    const table = soundValue(
      await readTable(
        csv(text),
        request({ numeric: ['x'], levels: [{ column: 'm', levels: ['0', '1', '2'] }] }),
      ),
    );
    expect(table.numeric.get('x')).toEqual(Float64Array.from({ length: count }, (_, i) => i / 7));
    expect(table.levels.get('m')?.codes).toEqual(Int32Array.from({ length: count }, (_, i) => i % 3));
  });
});

describe('rows', () => {
  test('shards take every row once', async () => {
    const source = csv(`x\n${Array.from({ length: 10 }, (_, i) => i).join('\n')}\n`);
    expect(await numbers(source, 'x', { shard: { index: 1, of: 3 } })).toEqual([0, 3, 6, 9]);
    expect(await numbers(source, 'x', { shard: { index: 3, of: 3 } })).toEqual([2, 5, 8]);
    const table = soundValue(
      await readTable(source, request({ numeric: ['x'], shard: { index: 2, of: 3 } })),
    );
    expect(table.rowNumbers).toEqual(Uint32Array.of(2, 5, 8));
  });

  test('dropped rows are counted and the others keep their numbers', async () => {
    const source = csv('x,m,other\n1,a,\n,a,1\n3,,1\n4,b,1\n');
    const table = soundValue(
      await readTable(
        source,
        request({ numeric: ['x'], levels: [{ column: 'm', levels: ['a', 'b'] }], missing: 'drop' }),
      ),
    );
    expect(table.numeric.get('x')).toEqual(Float64Array.of(1, 4));
    expect(table.levels.get('m')?.codes).toEqual(Int32Array.of(0, 1));
    expect(table.rowsDropped).toBe(2);
    expect(table.rowNumbers).toEqual(Uint32Array.of(1, 4));
  });

  test('Parquet files of a pattern are read in the order of their names', async () => {
    const folder = newFolder();
    await writeParquet(join(folder, 'b.parquet'), 'select 2 as x');
    await writeParquet(join(folder, 'a.parquet'), 'select 1 as x');
    expect(await numbers({ kind: 'parquet', path: join(folder, '*.parquet') }, 'x')).toEqual([1, 2]);
  });

  test('a query finds relative files in its own folder, whatever the working directory holds', async () => {
    const one = newFolder();
    const two = newFolder();
    writeText(one, 'pipes.csv', 'x\n1\n');
    writeText(two, 'pipes.csv', 'x\n2\n');
    const query = "select x * 10 as tenfold from 'pipes.csv' order by x;";
    const before = process.cwd();
    const read = await Promise.all(
      [one, two].map((folder) => numbers({ kind: 'query', query, folder }, 'tenfold')),
    );
    expect(read).toEqual([[10], [20]]);
    expect(process.cwd()).toBe(before);
  });
});

describe('a two-class response of which one class is named', () => {
  const response = { column: 'failed', levels: ['yes'], others: 'one' as const };
  test.each([
    ['no', 'failed\nno\nyes\nno\n', [1, 0, 1]],
    ['never', 'failed\nyes\nnever\n', [0, 1]],
  ])('takes %s as the other class', async (other, text, codes) => {
    const table = soundValue(await readTable(csv(text), request({ levels: [response] })));
    expect(table.levels.get('failed')).toEqual({ levels: ['yes', other], codes: Int32Array.from(codes) });
  });

  test('numbers are compared by value', async () => {
    const table = soundValue(
      await readTable(csv('failed\n1.0\n0\n0.0\n1\n'), request({ levels: [{ ...response, levels: ['1'] }] })),
    );
    expect(table.levels.get('failed')?.codes).toEqual(Int32Array.of(0, 1, 1, 0));
  });

  test('one class alone is no error of the table', async () => {
    const table = soundValue(await readTable(csv('failed\nyes\nyes\n'), request({ levels: [response] })));
    expect(table.levels.get('failed')?.levels).toEqual(['yes']);
  });
});

describe('labels', () => {
  const labelsOf = async (source: TableSource, partial: Partial<TableRequest> = {}) => {
    const table = soundValue(
      await readTable(source, request({ numeric: ['y'], labels: ['crew'], ...partial })),
    );
    const { levels, codes } = table.labels?.get('crew') ?? { levels: [], codes: [] };
    return Array.from(codes, (code) => levels[code]);
  };

  test('are every text there is, numbers by value', async () => {
    const text = 'crew,y\n1,1\n1.0,2\n01,3\nb,4\n 7,5\n-0,6\n1e2,7\n1_0,8\ninf,9\n9007199254740993,10\n';
    expect(await labelsOf(csv(text))).toEqual([
      '1',
      '1',
      '1',
      'b',
      '7',
      '0',
      '100',
      '1_0',
      'inf',
      '9007199254740993',
    ]);
  });

  test('of whole numbers that doubles do not tell apart stay apart', async () => {
    const query = 'select * from (values (9007199254740993, 1), (9007199254740992, 2), (10, 3)) t(crew, y)';
    const read = await labelsOf({ kind: 'query', query, folder: newFolder() });
    expect(read).toEqual(['9007199254740993', '9007199254740992', '10']);
  });

  test('missing ones are missing values, and a column can be term and label', async () => {
    const text = 'crew,y\n1,1\n,2\n2,3\n';
    expect(await labelsOf(csv(text), { missing: 'drop', numeric: ['y', 'crew'] })).toEqual(['1', '2']);
    const refused = await readTable(csv(text), request({ numeric: ['y'], labels: ['crew'] }));
    expect(refused).toMatchObject({
      ok: false,
      failure: { code: 'value-missing', where: { row: 2, column: 'crew' } },
    });
  });

  test('of a table without rows, or without any', async () => {
    const empty = await readTable(csv('crew,y\n'), request({ numeric: ['y'], labels: ['crew'] }));
    expect(empty).toMatchObject({ ok: false, failure: { code: 'table-empty' } });
    expect(await labelsOf(csv('crew,y\n,1\n'), { missing: 'drop' })).toEqual([]);
    const absent = await readTable(csv('y\n1\n'), request({ numeric: ['y'], labels: ['crew'] }));
    expect(absent).toMatchObject({
      ok: false,
      failure: { code: 'column-missing', where: { column: 'crew' } },
    });
  });
});
