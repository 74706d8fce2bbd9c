import { mkdtempSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, describe, expect, test } from 'vitest';
import { seededRandom } from '../../numerics/random.js';
import { fitInProcess } from '../support/in-process-fit.js';
import { referenceCase } from '../support/reference-case.js';

/** Greene, Econometric Analysis, table F7.1: the within estimates, on every rung. */
const airlines = referenceCase('o22_fixed_effects_airlines');
describe('o22: an intercept for each airline', () => {
  for (const rung of ['pooled', 'curvature', 'proximal'] as const) {
    const check = airlines === null ? test.skip : test;
    check(`slopes to 1e-8 on the rung ${rung}`, async () => {
      if (airlines === null) return;
      const text = [
        'commonfit: 1',
        'title: Cost of airlines',
        'sites: [firm1, firm2, firm3, firm4, firm5, firm6]',
        'response: {column: log_cost}',
        'loss: squared',
        'intercept: per-site',
        'terms: [{column: log_output}, {column: log_price}, {column: load}]',
        `rounds: {tolerance: 1e-12, rung: ${rung}}`,
      ].join('\n');
      const result = await fitInProcess(text, join(airlines.folder, 'data.csv'), null);
      expect(result.outcome).toBe('solved');
      for (const [name, value] of Object.entries(airlines.description.expected.fits[0].coefficients))
        expect(Math.abs((result.fits[0].coefficients[name] - value) / value)).toBeLessThan(1e-8);
      expect(result.fits[0].intercept).toBeNull();
    });
  }
});

describe('an intercept for each site', () => {
  const sites = ['harrowmere', 'castlefen', 'oakhythe'];
  const folder = mkdtempSync(join(tmpdir(), 'commonfit-own-intercept-'));
  afterAll(() => rmSync(folder, { recursive: true, force: true }));
  const path = join(folder, 'breaks.csv');
  const random = seededRandom(11);
  const lines = sites.flatMap((site, s) =>
    Array.from({ length: 30 }, () => {
      const [age, bar] = [random.normal(), random.normal()];
      const eta = s - 1 + 0.6 * age - 0.4 * bar;
      const failed = random.uniform() < 1 / (1 + Math.exp(-eta)) ? 1 : 0;
      return [site, age, bar, eta + random.normal(), failed, random.poisson(Math.exp(eta))].join(',');
    }),
  );
  writeFileSync(path, ['site,age,bar,size,failed,breaks', ...lines].join('\n'));
  const textOf = (loss: string, response: string, rung: string, own: boolean) =>
    [
      'commonfit: 1',
      'title: Breaks by age',
      `sites: [${sites.join(', ')}]`,
      `response: {column: ${response}}`,
      `loss: ${loss}`,
      `intercept: ${own ? 'per-site' : 'none'}`,
      'terms:',
      '  - {column: age}',
      '  - {column: bar}',
      ...(own ? [] : [`  - {column: site, levels: [${sites.join(', ')}], baseline: null}`]),
      `penalty: [{kind: ridge, lambda: 0.01${own ? '' : ', per-term: {site: 0}'}}]`,
      `rounds: {tolerance: 1e-13, rung: ${rung}}`,
    ].join('\n');

  for (const [loss, response, rung] of [
    ['squared', 'size', 'proximal'],
    ['logistic', 'failed', 'curvature'],
    ['poisson', 'breaks', 'proximal'],
    ['{kind: huber, threshold: 1.5}', 'size', 'curvature'],
  ])
    test(`is one indicator a site, for ${response} under ${loss} on the rung ${rung}`, async () => {
      const own = await fitInProcess(textOf(loss, response, rung, true), path, null);
      const shared = await fitInProcess(textOf(loss, response, 'curvature', false), path, null);
      expect([own.outcome, shared.outcome]).toEqual(['solved', 'solved']);
      for (const name of ['age', 'bar'])
        expect(own.fits[0].coefficients[name]).toBeCloseTo(shared.fits[0].coefficients[name], 6);
      expect(own.fits[0].objective).toBeCloseTo(shared.fits[0].objective, 10);
    });
});
