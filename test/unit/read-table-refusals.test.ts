import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import { readTable } from '../../worker/source/read-table.js';
import type { TableRequest, TableSource } from '../../worker/source/table.js';
import { failureOf, newFolder, request, writeText } from '../support/tables.js';

const refusal = async (source: TableSource, partial: Partial<TableRequest>) =>
  failureOf(await readTable(source, request(partial)));

const csv = (text: string | Buffer): TableSource => ({
  kind: 'csv',
  path: writeText(newFolder(), 'pipes.csv', text),
});
const jsonl = (text: string): TableSource => ({
  kind: 'jsonl',
  path: writeText(newFolder(), 'pipes.jsonl', text),
});

describe('tables that are not there', () => {
  test.each(['csv', 'jsonl', 'parquet'] as const)('a missing %s file', async (kind) => {
    const path = join(newFolder(), `pipes.${kind}`);
    expect(await refusal({ kind, path }, { numeric: ['x'] })).toMatchObject({
      code: 'table-missing',
      where: { file: path },
    });
  });

  test('a pattern that no file fits', async () => {
    const path = join(newFolder(), '*.parquet');
    expect((await refusal({ kind: 'parquet', path }, { numeric: ['x'] })).code).toBe('table-missing');
  });

  test('a query whose folder is gone', async () => {
    const folder = join(newFolder(), 'gone');
    const failure = await refusal({ kind: 'query', query: 'select 1 as x', folder }, { numeric: ['x'] });
    expect(failure).toMatchObject({ code: 'table-missing', where: { file: folder } });
  });

  test.each([
    ['no bytes', csv('')],
    ['a header alone', csv('x,y\n')],
    ['JSON lines without a line', jsonl('')],
  ])('%s', async (_, source) => {
    expect((await refusal(source, { numeric: ['x'] })).code).toBe('table-empty');
  });

  test('a query without rows', async () => {
    const source: TableSource = { kind: 'query', query: 'select 1 as x where false', folder: newFolder() };
    expect((await refusal(source, { numeric: ['x'] })).code).toBe('table-empty');
  });
});

describe('tables that cannot be read', () => {
  test.each([
    ['a row too short', csv('x,y\n1,2\n3\n')],
    ['a row too long', csv('x,y\n1,2\n3,4,5\n')],
    ['an open quote', csv('x,y\n1,2\n3,"4\n')],
    ['Latin-1', csv(Buffer.from([0x78, 0x0a, 0xe9, 0x0a]))],
    ['UTF-16', csv(Buffer.from('x\n1\n', 'utf16le'))],
    ['a broken JSON line', jsonl('{"x":1}\n{"x":\n{"x":3}\n')],
    ['a JSON array', jsonl('[{"x":1}]\n')],
    ['a Parquet file that is none', { kind: 'parquet', path: writeText(newFolder(), 'p.parquet', 'x\n1\n') }],
    ['a query that is not SQL', { kind: 'query', query: 'pipes, please', folder: newFolder() }],
    ['a query that is no select', { kind: 'query', query: 'create table t (x int)', folder: newFolder() }],
  ] as [string, TableSource][])('%s', async (_, source) => {
    const failure = await refusal(source, { numeric: ['x'] });
    expect(failure.code).toBe('table-unreadable');
    expect(failure.message.length).toBeLessThan(400);
  });
});

describe('columns', () => {
  test('a missing column names what there is and the nearest name', async () => {
    const failure = await refusal(csv('breaks,age_year\n1,2\n'), { numeric: ['breaks', 'age_years'] });
    expect(failure).toMatchObject({ code: 'column-missing', where: { column: 'age_years' } });
    expect(failure.message).toContain('breaks, age_year');
    expect(failure.remedy).toContain('"age_year"');
  });

  test.each(['refuse', 'drop'] as const)('a key that no JSON line has, with missing: %s', async (missing) => {
    const failure = await refusal(jsonl('{"x":1,"Agee":2}\n{"x":3}\n'), { numeric: ['x', 'Age'], missing });
    expect(failure).toMatchObject({ code: 'column-missing', where: { column: 'Age' } });
    expect(failure.remedy).toContain('"Agee"');
  });

  test.each([
    ['CSV', csv('x,y,x\n1,2,3\n')],
    ['a query', { kind: 'query', query: 'select 1 as x, 2 as x', folder: newFolder() }],
  ] as [string, TableSource][])('a name twice in %s', async (_, source) => {
    expect(await refusal(source, { numeric: ['x'] })).toMatchObject({
      code: 'header-duplicate',
      where: { column: 'x' },
    });
  });
});

describe('values', () => {
  test.each(['old', '1,5', '1_000', '0x1F', 'NA', '2020-01-01'])('%s is not a number', async (text) => {
    const failure = await refusal(csv(`y,x\n0,1\n0,2\n0,"${text}"\n0,worse\n`), { numeric: ['y', 'x'] });
    expect(failure).toMatchObject({ code: 'column-not-numeric', where: { row: 3, column: 'x' } });
    expect(failure.message).toContain(`"${text}"`);
  });

  test.each(['nan', 'inf', '-Infinity', '1e999'])('%s is not finite', async (text) => {
    expect(await refusal(csv(`x\n1\n${text}\n`), { numeric: ['x'] })).toMatchObject({
      code: 'value-not-finite',
      where: { row: 2, column: 'x' },
    });
  });

  test('numbers of a query that are not finite', async () => {
    const query = "select * from (values (1::double), ('nan'::double)) t(x)";
    expect(await refusal({ kind: 'query', query, folder: newFolder() }, { numeric: ['x'] })).toMatchObject({
      code: 'value-not-finite',
      where: { row: 2, column: 'x' },
    });
  });

  test.each([
    ['CSV', csv('x,y\n1,2\n3,\n')],
    ['JSON lines, null', jsonl('{"x":1,"y":2}\n{"x":3,"y":null}\n')],
    ['JSON lines, absent', jsonl('{"x":1,"y":2}\n{"x":3}\n')],
    ['JSON lines, empty text', jsonl('{"x":1,"y":2}\n{"x":3,"y":""}\n')],
  ])('a missing value in %s', async (_, source) => {
    expect(await refusal(source, { numeric: ['x', 'y'] })).toMatchObject({
      code: 'value-missing',
      where: { row: 2, column: 'y' },
    });
  });

  test('an unknown level names the permitted ones', async () => {
    const failure = await refusal(csv('m\npvc\nPVC\n'), {
      levels: [{ column: 'm', levels: ['pvc', 'steel'] }],
      missing: 'drop',
    });
    expect(failure).toMatchObject({ code: 'level-unknown', where: { row: 2, column: 'm' } });
    expect(failure.message).toContain('"PVC"');
    expect(failure.message).toContain('"pvc", "steel"');
  });

  test('a third class of a two-class response', async () => {
    const failure = await refusal(csv('failed\nno\nyes\nmaybe\n'), {
      levels: [{ column: 'failed', levels: ['yes'], others: 'one' }],
    });
    expect(failure).toMatchObject({ code: 'response-range', where: { row: 3, column: 'failed' } });
    expect(failure.message).toContain('"maybe"');
  });

  test('the first row with something wrong is named, far down a long table', async () => {
    const lines = Array.from({ length: 60_000 }, (_, i) =>
      i === 45_678 ? 'rust' : i > 50_000 ? '' : `${i}`,
    );
    const failure = await refusal(csv(`z,x\n${lines.map((x) => `0,${x}`).join('\n')}\n`), { numeric: ['x'] });
    expect(failure).toMatchObject({ code: 'column-not-numeric', where: { row: 45_679 } });
  });

  test('rows of another shard are not judged', async () => {
    const source = csv('x\n1\nbad\n3\n');
    expect((await readTable(source, request({ numeric: ['x'], shard: { index: 1, of: 2 } }))).ok).toBe(true);
    expect(await refusal(source, { numeric: ['x'], shard: { index: 2, of: 2 } })).toMatchObject({
      where: { row: 2 },
    });
  });
});
