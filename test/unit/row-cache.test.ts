import { existsSync, mkdtempSync, readdirSync, readlinkSync, rmSync, statSync, truncateSync } from 'node:fs';
import { open } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import fc from 'fast-check';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import { RowsLost } from '../../worker/design/streamed-rows.js';
import { checkRowCache, type RowCache, RowCacheWriter } from '../../worker/service/row-cache.js';
import { failureOf, soundValue } from '../support/tables.js';

let folder: string;
const opened: RowCache[] = [];
beforeEach(() => {
  folder = mkdtempSync(join(tmpdir(), 'commonfit-rows-'));
});
afterEach(() => {
  for (const cache of opened.splice(0)) cache.close();
  rmSync(folder, { recursive: true });
});

const beginning = (): string => join(folder, 'castlefen.rows');

/** Row r of the table is r, r + 0.1, …: of groups as given, appended some at a time. */
function written(
  width: number,
  groups: readonly number[],
  atOnce: number,
  order: readonly number[],
): RowCache {
  const writer = soundValue(RowCacheWriter.open(beginning(), width));
  for (let from = 0; from < groups.length; from += atOnce) {
    const part = groups.slice(from, from + atOnce);
    const x = new Float64Array(part.length * width).map((_, at) =>
      entryOf(from + Math.floor(at / width), at % width),
    );
    soundValue(writer.append(x, part.length, Int32Array.from(part)));
  }
  const cache = soundValue(writer.finish(order));
  opened.push(cache);
  return cache;
}

const entryOf = (row: number, column: number): number => row + column / 10;

/** What this process has open of the file. */
function pathOfOpenFile(): string {
  const found = readdirSync('/proc/self/fd').find((number) => {
    try {
      return readlinkSync(`/proc/self/fd/${number}`).startsWith(beginning());
    } catch {
      return false;
    }
  });
  return `/proc/self/fd/${found}`;
}

describe('rows in a file', () => {
  test('are read group after group, each in the order it came, whatever stretch is asked for', () => {
    fc.assert(
      fc.property(
        fc.constantFrom(1, 700, 9000, 17_000),
        fc.array(fc.integer({ min: 0, max: 2 }), { minLength: 1, maxLength: 150 }),
        fc.integer({ min: 1, max: 60 }),
        fc.shuffledSubarray([0, 1, 2], { minLength: 3 }),
        fc.array(fc.tuple(fc.nat(), fc.nat()), { minLength: 1, maxLength: 3 }),
        (width, groups, atOnce, order, stretches) => {
          const few = groups.slice(0, Math.max(6, Math.ceil(60_000 / width)));
          const cache = written(width, few, atOnce, order);
          const wanted = order.flatMap((group) => few.flatMap((own, row) => (own === group ? [row] : [])));
          expect(cache.rowCount).toBe(few.length);
          for (const [a, b] of [[0, few.length], ...stretches]) {
            const [from, to] = [a % (few.length + 1), b % (few.length + 1)].sort((x, y) => x - y);
            const out = new Float64Array((to - from) * width);
            cache.read(from, to, out);
            const same = out.every(
              (value, at) => value === entryOf(wanted[from + Math.floor(at / width)], at % width),
            );
            expect(same, `rows ${from} to ${to}`).toBe(true);
          }
        },
      ),
      { numRuns: 25 },
    );
  });

  test('leave no name in the folder', () => {
    const cache = written(3, [0, 0, 0], 2, [0]);
    expect(readdirSync(folder)).toEqual([]);
    expect(soundValue(checkRowCache(beginning()))).toBeNull();
    expect(readdirSync(folder)).toEqual([]);
    cache.close();
    expect(() => cache.read(0, 1, new Float64Array(3))).toThrow(RowsLost);
  });

  test('cannot be kept in a folder that is not there', () => {
    const nowhere = join(folder, 'gone', 'castlefen.rows');
    for (const failure of [failureOf(RowCacheWriter.open(nowhere, 2)), failureOf(checkRowCache(nowhere))])
      expect(failure).toMatchObject({ code: 'state-unwritable', where: { file: join(folder, 'gone') } });
  });
});

describe.skipIf(!existsSync('/proc/self/fd'))('a file that is not as it was written', () => {
  test('is for its owner alone', () => {
    written(3, [0, 0], 2, [0]);
    expect(statSync(pathOfOpenFile()).mode & 0o777).toBe(0o600);
  });

  test.each([
    ['cut short', 8 * 3 * 3 - 1, /was cut to 71 bytes/],
    ['empty', 0, /was cut to 0 bytes/],
  ])('%s: named, and no number given', (_, bytes, words) => {
    const cache = written(3, [0, 0, 0], 2, [0]);
    truncateSync(pathOfOpenFile(), bytes);
    const out = new Float64Array(9);
    expect(() => cache.read(0, 3, out)).toThrow(words);
    expect(() => cache.read(0, 3, out)).toThrow(RowsLost);
  });

  test('with one other bit: named, wherever the rows asked for are in its piece', async () => {
    const cache = written(3, [0, 0, 0], 2, [0]);
    const file = await open(pathOfOpenFile(), 'r+');
    await file.write(Uint8Array.of(1), 0, 1, 8 * 8 + 3);
    await file.close();
    for (const [from, to] of [
      [0, 1],
      [2, 3],
      [0, 3],
    ])
      expect(() => cache.read(from, to, new Float64Array(9))).toThrow(/is not as it was written/);
  });
});
