import { spawn } from 'node:child_process';
import { mkdtemp, readdir, readFile, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { text } from 'node:stream/consumers';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { modelText } from '../../protocol/model/model-document.js';
import { numericTerm } from '../support/designs.js';
import { programs } from '../support/programs.js';
import { modelDocument } from '../support/random-model.js';

let folder = '';

beforeAll(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-score-test-'));
  const model = modelDocument({
    title: 'Breaks by age',
    terms: [{ ...numericTerm('age_years'), unit: 'year' }],
    coefficients: [{ name: 'age_years', value: 2 }],
  });
  await writeFile(join(folder, 'model.json'), modelText(model));
  await writeFile(join(folder, 'good.csv'), 'pipe,age_years\nP1,1\nP2,2.5\n');
  await writeFile(join(folder, 'unfit.csv'), 'pipe,age_years\nP1,1\nP2,old\n');
});
afterAll(() => rm(folder, { recursive: true, force: true }));

async function score(...args: string[]): Promise<{ code: number | null; out: string; err: string }> {
  const child = spawn(process.execPath, [programs.worker, 'score', ...args], { cwd: folder });
  const ended = new Promise<number | null>((resolve) => child.once('close', resolve));
  const [out, err] = await Promise.all([text(child.stdout), text(child.stderr)]);
  return { code: await ended, out, err };
}

describe('commonfit-worker score', () => {
  test('writes CSV to standard output, and what a reader should know to standard error', async () => {
    const { code, out, err } = await score('model.json', 'good.csv');
    expect(out).toBe('pipe,age_years,prediction,linear_predictor\nP1,1,2.5,2.5\nP2,2.5,5.5,5.5\n');
    expect(code).toBe(0);
    expect(err).toContain('2 rows.');
    expect(err).toContain('age_years in year');
    expect(err).toContain('licensed practice');
    expect((await score('model.json', 'good.csv', '--quiet')).err).toBe('');
  });

  test('a row that cannot be scored ends it with nothing written, on standard output or in a file', async () => {
    await writeFile(join(folder, 'kept.csv'), 'as it was\n');
    for (const out of [[], ['--out', 'kept.csv'], ['--out', 'new.parquet']]) {
      const { code, out: written, err } = await score('model.json', 'unfit.csv', ...out);
      expect(code).toBe(4);
      expect(written).toBe('');
      expect(err).toContain('unfit.csv, row 2, column age_years: The value "old" is not a number.');
    }
    expect(await readFile(join(folder, 'kept.csv'), 'utf8')).toBe('as it was\n');
    expect((await readdir(folder)).sort()).toEqual(['good.csv', 'kept.csv', 'model.json', 'unfit.csv']);
  });

  test('--flag-rows keeps such rows with a note, and ends with a code of its own', async () => {
    const { code, err } = await score(
      ...['model.json', 'unfit.csv', '--flag-rows', '--columns', 'pipe', '--out', 'flagged.jsonl'],
    );
    expect(code).toBe(8);
    expect(err).toContain('1 row could not be scored');
    const [first, second] = (await readFile(join(folder, 'flagged.jsonl'), 'utf8')).trim().split('\n');
    expect(JSON.parse(first ?? '')).toEqual({
      pipe: 'P1',
      prediction: 2.5,
      linear_predictor: 2.5,
      note: null,
    });
    expect(JSON.parse(second ?? '')).toEqual({
      pipe: 'P2',
      prediction: null,
      linear_predictor: null,
      note: 'age_years: The value "old" is not a number.',
    });
  });

  test.each([
    [['model.json', 'good.xlsx'], 3, 'a .csv, .parquet'],
    [['model.json', 'good.csv', '--out', 'x.txt'], 3, 'known are csv, parquet and jsonl'],
    [['model.json', 'good.csv', '--out', './good.csv'], 3, 'written over good.csv'],
    [['good.csv', 'good.csv'], 3, 'is not JSON'],
    [['absent.json', 'good.csv'], 3, 'no such file'],
    [['model.json', 'absent.csv'], 4, 'no such file'],
    [['model.json', 'good.csv', '--out', 'nowhere/x.csv'], 7, 'ENOENT'],
    [['model.json'], 2, 'missing required argument'],
  ])('%j ends with code %d', async (args, expected, words) => {
    const { code, err } = await score(...args);
    expect(err).toContain(words);
    expect(code).toBe(expected);
  });
});
