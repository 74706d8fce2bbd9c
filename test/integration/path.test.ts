import { mkdtempSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, describe, expect, test } from 'vitest';
import { seededRandom } from '../../numerics/random.js';
import { fitInProcess } from '../support/in-process-fit.js';

const folder = mkdtempSync(join(tmpdir(), 'commonfit-path-'));
afterAll(() => rmSync(folder, { recursive: true, force: true }));

const COLUMNS = Array.from({ length: 12 }, (_, j) => `x${j}`);
const SITES = ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'];

/** Rows of four sites; `strength` drives how nearly the classes are separated. */
function table(name: string, rows: number, strength: number): string {
  const random = seededRandom(11);
  const lines = [['site', 'fold', 'failed', 'cost', ...COLUMNS].join(',')];
  for (let i = 0; i < rows; i++) {
    const x = COLUMNS.map(() => random.normal());
    const eta = strength * (x[0] - 0.7 * x[3] + 0.4 * x[6]);
    const failed = random.uniform() < 1 / (1 + Math.exp(-eta)) ? 1 : 0;
    const cost = eta + random.normal();
    lines.push([SITES[i % 4], i % 5, failed, cost, ...x].join(','));
  }
  const file = join(folder, name);
  writeFileSync(file, `${lines.join('\n')}\n`);
  return file;
}

const specification = (loss: string, column: string, more: string): string => `commonfit: 1
title: A path of penalties
sites: [${SITES.join(', ')}]
response: {column: ${column}}
loss: ${loss}
terms: [${COLUMNS.map((name) => `{column: ${name}}`).join(', ')}]
penalty: [{kind: lasso, lambda: {count: 20, ratio: 0.01}, scaled: true}]
${more}
`;

describe('a path of 20 λ with 5 folds: 120 fits together', () => {
  const rows = table('plain.csv', 1200, 1);
  const folds = 'choose: {folds: 5, seed: 3, rule: minimum}';

  test('of a squared loss takes one round', async () => {
    const result = await fitInProcess(specification('squared', 'cost', folds), rows, 3);
    expect([result.outcome, result.rung, result.rounds]).toEqual(['solved', 'pooled', 1]);
    expect(result.choice?.crossValidation?.folds.map(({ rows }) => rows).reduce((a, b) => a + b)).toBe(1200);
  });

  test.each([
    ['curvature', null],
    ['proximal', 3],
  ] as const)('of a logistic loss takes at most 8 rounds on the rung %s', async (rung, most) => {
    const result = await fitInProcess(specification('logistic', 'failed', folds), rows, most);
    expect([result.outcome, result.rung]).toEqual(['solved', rung]);
    expect(result.rounds).toBeLessThanOrEqual(8);
    // the first λ is the smallest at which every slope is zero
    expect(Object.values(result.fits[0].coefficients).every((value) => value === 0)).toBe(true);
    expect(Object.values(result.fits[1].coefficients).some((value) => value !== 0)).toBe(true);
    expect(result.choice?.nonzero.at(-1)).toBeGreaterThan(result.choice?.nonzero[1] ?? 12);
  });

  test('of nearly separated classes takes at most 15 rounds', async () => {
    const strong = table('strong.csv', 1200, 12);
    const result = await fitInProcess(specification('logistic', 'failed', folds), strong, null);
    expect(result.outcome).toBe('solved');
    expect(result.rounds).toBeLessThanOrEqual(15);
  });
});

describe('the choice', () => {
  const rows = table('choice.csv', 800, 1);

  test('by a column and by one standard error takes a larger λ than the minimum', async () => {
    const text = specification(
      'logistic',
      'failed',
      'choose: {folds: {column: fold}, rule: one-standard-error}',
    );
    const { choice, chosen, fits } = await fitInProcess(text, rows, null);
    expect(choice?.crossValidation?.folds.map(({ fold }) => fold)).toEqual(['0', '1', '2', '3', '4']);
    expect(chosen).toBe(choice?.chosen);
    expect(choice?.lambdas[choice.chosen]).toBeGreaterThanOrEqual(choice?.lambdas[choice.minimum] ?? 0);
    expect(fits).toHaveLength(20);
  });

  test('by a criterion needs no fold', async () => {
    const text = specification('logistic', 'failed', 'choose: {criterion: bic}');
    const { choice, fits } = await fitInProcess(text, rows, null);
    expect(choice?.crossValidation).toBeNull();
    expect(choice?.chosen).toBe(choice?.minimum);
    const { coefficients } = fits[choice?.chosen ?? -1];
    const found = COLUMNS.filter((name) => coefficients[name] !== 0);
    // three columns matter; of the nine others a criterion may let one in
    expect(found).toEqual(expect.arrayContaining(['x0', 'x3', 'x6']));
    expect(found.length).toBeLessThanOrEqual(4);
  });

  test('a fold column with one value is refused in words', async () => {
    const text = specification('logistic', 'failed', 'choose: {folds: {column: one}, rule: minimum}');
    const single = join(folder, 'single.csv');
    const lines = readFileSync(rows, 'utf8').trimEnd().split('\n');
    writeFileSync(single, `${lines.map((line, i) => `${line},${i === 0 ? 'one' : 'a'}`).join('\n')}\n`);
    const result = await fitInProcess(text, single, null);
    expect(result.outcome).toBe('refused');
    expect(result.reason).toContain('the fold column one makes 1 fold over all sites');
  });
});
