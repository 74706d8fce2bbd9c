import { mkdtempSync, readdirSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { seededRandom } from '../../numerics/random.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Choice, FitSpecification } from '../../protocol/specification/types.js';
import { buildRawShard } from '../../worker/design/build.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import { windowBytes } from '../../worker/design/raw-streamed-rows.js';
import type { RawShard } from '../../worker/design/shard.js';
import { RowsLost } from '../../worker/design/streamed-rows.js';
import {
  type BuiltShard,
  type ShardBuilder,
  shardsInMemory,
  withinMemory,
} from '../../worker/service/built-shard.js';
import { boundedShards } from '../../worker/service/row-store.js';
import { bytesOfSize, sizeText } from '../../worker/service/size.js';
import type { Table } from '../../worker/source/table.js';
import { levelsTerm, numericTerm, specification } from '../support/designs.js';
import { NO_REPORT } from '../support/specifications.js';
import { failureOf, request, soundValue } from '../support/tables.js';
import { askOf, prepareOf, siteInMemory, TABLE } from '../support/worker-site.js';

let folder: string;
beforeAll(() => {
  folder = mkdtempSync(join(tmpdir(), 'commonfit-store-'));
});
afterAll(() => rmSync(folder, { recursive: true }));

const ROWS = 3000;
const PART = 257;
const MATERIALS = ['pvc', 'steel', 'iron'];
/** A label may stand twice in the list. */
const CREWS = ['b', 'a', 'b', 'never', 'c'];

/** Rows as they are read from a source of which each third row was left out. */
function pipes(change: Record<string, (values: Float64Array) => void> = {}): Table {
  const random = seededRandom(5);
  const numbers = (of: (value: number) => number): Float64Array =>
    Float64Array.from({ length: ROWS }, () => of(random.uniform()));
  const codes = (count: number): Int32Array => Int32Array.from(numbers((u) => Math.floor(count * u)));
  const numeric = new Map([
    ['y', numbers((u) => u)],
    ['a', numbers((u) => 1 + u)],
    ['w', numbers((u) => u)],
    ['e', numbers((u) => 0.5 + u)],
  ]);
  for (const [name, values] of numeric) change[name]?.(values);
  return {
    rowCount: ROWS,
    rowsDropped: ROWS / 2,
    rowNumbers: Uint32Array.from({ length: ROWS }, (_, row) => 1 + row + Math.floor(row / 2)),
    numeric,
    levels: new Map([['m', { levels: MATERIALS, codes: codes(3) }]]),
    labels: new Map([
      ['crew', { levels: CREWS, codes: codes(3).map((code) => (code === 2 ? 4 : code)) }],
      ['street', { levels: Array.from({ length: 50 }, (_, k) => `street ${k}`), codes: codes(50) }],
    ]),
  };
}

const SPEC = specification({
  terms: [numericTerm('a', 'log'), levelsTerm('m', MATERIALS, 'pvc')],
  weights: { column: 'w' },
  offset: { kind: 'exposure', column: 'e' },
  report: { ...NO_REPORT, sandwich: { cluster: 'street' }, margins: true },
});
const byCrew: Choice = { kind: 'folds', by: { kind: 'column', column: 'crew' }, rule: 'minimum' };
const byNumber: Choice = { kind: 'folds', by: { kind: 'hash', folds: 4, seed: 9 }, rule: 'minimum' };

const columnPart = <C extends Float64Array | Int32Array>(values: C, from: number, to: number): C =>
  values.slice(from, to) as C;

function partsOf(table: Table): Table[] {
  const parts: Table[] = [];
  for (let from = 0; from < table.rowCount; from += PART) {
    const to = Math.min(from + PART, table.rowCount);
    const coded = (columns: Table['levels']) =>
      new Map(
        [...columns].map(([name, { levels, codes }]) => [
          name,
          { levels, codes: columnPart(codes, from, to) },
        ]),
      );
    parts.push({
      rowCount: to - from,
      rowsDropped: 0,
      rowNumbers: table.rowNumbers?.slice(from, to),
      numeric: new Map([...table.numeric].map(([name, values]) => [name, columnPart(values, from, to)])),
      levels: coded(table.levels),
      labels: coded(table.labels ?? new Map()),
    });
  }
  return parts;
}

const bounded = (table: Table, memoryBytes: number): ShardBuilder =>
  boundedShards({
    memoryBytes,
    cachePath: join(folder, 'castlefen.rows'),
    readInParts: async (_, take) => {
      for (const part of partsOf(table)) {
        const taken = take(part);
        if (!taken.ok) return taken;
      }
      return succeed({ rowCount: table.rowCount, rowsDropped: table.rowsDropped });
    },
    readTable: async () => fail('internal', 'the table was read as a whole'),
  });

const built = (spec: FitSpecification, table: Table, memoryBytes: number): Promise<Checked<BuiltShard>> =>
  bounded(table, memoryBytes)(spec, request({}));

/** Enough for what is kept of the rows, too little for their columns. */
const tight = (choose: Choice | null, width = 3): number =>
  windowBytes(width) + ROWS * (choose === null ? 160 : 230);
const TIGHT = tight(null);

function entries({ rows, rowCount }: RawShard): Float64Array {
  const x = new Float64Array(rowCount * rows.p);
  rows.copy(0, rowCount, x);
  return x;
}

describe('a shard whose design goes to disk', () => {
  test.each([
    ['without folds', null],
    ['with folds by a column', byCrew],
    ['with folds by number', byNumber],
  ])('%s is the one in memory', async (_, choose) => {
    const spec = { ...SPEC, choose };
    const { raw, cache, bytesOnDisk } = soundValue(await built(spec, pipes(), tight(choose)));
    const wanted = soundValue(buildRawShard(spec, pipes()));
    expect(bytesOnDisk).toBe(8 * 3 * ROWS);
    expect(entries(raw)).toEqual(entries(wanted));
    expect({ ...raw, rows: null }).toEqual({ ...wanted, rows: null });
    cache?.close();
    expect(readdirSync(folder)).toEqual([]);
  });

  test('fits the limit: it stays in memory', async () => {
    const { raw, cache, bytesOnDisk } = soundValue(await built({ ...SPEC, choose: byCrew }, pipes(), 1e9));
    expect(cache).toBeNull();
    expect(bytesOnDisk).toBe(0);
    const wanted = soundValue(buildRawShard({ ...SPEC, choose: byCrew }, pipes()));
    expect(raw).toEqual(wanted);
    expect(raw.rows).toBeInstanceOf(RawDenseRows);
  });

  test('a limit too small for what is kept of each row names what is enough', async () => {
    const small = windowBytes(3) + 1000;
    const failure = failureOf(await built(SPEC, pipes(), small));
    expect(failure).toMatchObject({ code: 'table-unreadable' });
    expect(failure.message).toContain(`of ${ROWS} rows`);
    const enough = /Join with --memory (\S+) or more/.exec(failure.remedy ?? '')?.[1] ?? '';
    const again = soundValue(await built(SPEC, pipes(), soundValue(bytesOfSize(enough))));
    again.cache?.close();
  });

  test('a value that cannot be used names its row in the source', async () => {
    const table = pipes({
      a: (values) => {
        values[2500] = 0;
      },
    });
    expect(failureOf(await built(SPEC, table, TIGHT))).toEqual(failureOf(buildRawShard(SPEC, table)));
    expect(failureOf(await built(SPEC, table, TIGHT)).where).toEqual({ row: 3751, column: 'a' });
  });

  test('no row, or fewer rows than folds, and too many folds, are refused as in memory', async () => {
    const empty = { ...pipes(), rowCount: 0 };
    expect(failureOf(await built(SPEC, empty, TIGHT)).code).toBe('no-rows');
    const few = { ...specification({ terms: [numericTerm('a')] }), choose: byNumber };
    expect(failureOf(await built(few, { ...pipes(), rowCount: 3 }, tight(byNumber, 1))).code).toBe(
      'rows-too-few',
    );
    const streets: Choice = { kind: 'folds', by: { kind: 'column', column: 'many' }, rule: 'minimum' };
    const codes = Int32Array.from({ length: ROWS }, (_, row) => row % 400);
    const many = {
      ...pipes(),
      labels: new Map([['many', { levels: Array.from({ length: 400 }, (_, k) => `street ${k}`), codes }]]),
    };
    const spec = { ...specification({ terms: [numericTerm('a')] }), choose: streets };
    expect(failureOf(await built(spec, many, tight(streets, 1)))).toMatchObject({
      code: 'field-value',
      where: { column: 'many' },
    });
  });
});

describe('rows that are lost', () => {
  const first = askOf('r1', 1, { work: 'survey' });
  const losing = (losses: number): ShardBuilder => {
    const inMemory = shardsInMemory(async () => succeed(TABLE));
    let left = losses;
    return async (spec, wanted) => {
      const shard = soundValue(await inMemory(spec, wanted));
      if (left-- <= 0) return succeed(shard);
      const cache = { rowCount: 0, width: 0, read: () => undefined, close: () => undefined };
      const moments = (): never => {
        throw new RowsLost(cache, 'The rows are lost.');
      };
      const rows = Object.assign(Object.create(shard.raw.rows), { moments });
      return succeed({ raw: { ...shard.raw, rows }, cache, bytesOnDisk: 8 });
    };
  };

  test('once: the table is read again, and the answer is that of rows which stayed', async () => {
    const undisturbed = await siteInMemory();
    const { answerer, events } = await siteInMemory({ buildShard: losing(1) });
    for (const worker of [undisturbed.answerer, answerer]) worker.prepare(prepareOf('r1'));
    expect(await answerer.answer(first)).toEqual(await undisturbed.answerer.answer(first));
    expect(events.filter(({ event }) => event === 'table')).toHaveLength(2);
  });

  test('for good end in a refusal, and the worker stays', async () => {
    const { answerer, events } = await siteInMemory({ buildShard: losing(Number.POSITIVE_INFINITY) });
    answerer.prepare(prepareOf('r1'));
    expect(await answerer.answer(first)).toMatchObject({ kind: 'refusal', code: 'state-unwritable' });
    expect(events.filter(({ event }) => event === 'warning')).toEqual([
      { event: 'warning', message: 'The rows are lost. The table is read again.' },
    ]);
  });
});

describe('memory that there is not', () => {
  test('ends in a failure that names the option', async () => {
    const refused = await withinMemory(() => succeed(new Float64Array(2 ** 52)));
    expect(failureOf(refused)).toMatchObject({ code: 'table-unreadable' });
    expect(failureOf(refused).remedy).toContain('--memory');
    const large = shardsInMemory(async () => succeed(pipes()), 2 * 8 * 3 * ROWS - 1);
    expect(failureOf(await large(SPEC, request({}))).remedy).toContain('--memory');
    const fits = shardsInMemory(async () => succeed(pipes()), 2 * 8 * 3 * ROWS);
    expect((await fits(SPEC, request({}))).ok).toBe(true);
  });

  test('defects are not taken for it', async () => {
    const defect = withinMemory((): Checked<null> => {
      throw new TypeError('a defect');
    });
    await expect(defect).rejects.toThrow('a defect');
  });
});

describe('a size', () => {
  test.each([
    ['512MB', 512e6],
    ['2GB', 2e9],
    ['1.5GiB', 1.5 * 2 ** 30],
    ['300 kb', 300_000],
    ['16KiB', 16_384],
  ])('%s', (text, bytes) => {
    expect(soundValue(bytesOfSize(text))).toBe(bytes);
  });

  test.each(['', '512', '0MB', '-1GB', '1.GB', 'MB', '1e3MB', '12XB', '9999999TB', '1,5GB'])(
    '%j is none',
    (text) => {
      expect(failureOf(bytesOfSize(text))).toMatchObject({
        code: 'field-value',
        remedy: 'Give a number and a unit: 512MB, 2GB or 1.5GiB.',
      });
    },
  );

  test('in words is not less than it is', () => {
    for (const bytes of [1, 999, 1001, 12_345_678, 10 ** 10, 123_456_789_012])
      expect(soundValue(bytesOfSize(sizeText(bytes)))).toBeGreaterThanOrEqual(bytes);
  });
});
