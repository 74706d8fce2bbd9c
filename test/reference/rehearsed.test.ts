import { execFile } from 'node:child_process';
import { mkdtempSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { promisify } from 'node:util';
import { afterAll, describe, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { programs } from '../support/programs.js';
import {
  type ReferenceCase,
  type ReferenceFit,
  referenceCase,
  specificationOf,
} from '../support/reference-case.js';

/**
 * The reference cases through the real processes: `commonfit rehearse` splits the table by site and runs one worker
 * process per site. Sources of data and values: test/reference/README.md and each case.json.
 */
const CASES = [
  'o01_ols_longley',
  'o02_ols_norris',
  'o03_wls_states',
  'o04_ridge_diabetes',
  'o05_lasso_path_diabetes',
  'o06_enet_diabetes_unstandardised',
  'o07_logistic_birthwt',
  'o08_logistic_lasso_birthwt',
  'o09_poisson_offset_insurance',
  'o10_poisson_lasso_quine',
] as const;

const run = promisify(execFile);
const scratch = mkdtempSync(join(tmpdir(), 'commonfit-reference-'));
afterAll(() => rmSync(scratch, { recursive: true, force: true }));

describe.each(CASES)('%s', (name) => {
  const reference = referenceCase(name);
  test.skipIf(reference === null)(
    'comes out of real processes to 1e-6 relative in every coefficient',
    async () => {
      if (reference === null) throw new Error('skipped');
      const result = await rehearse(reference);
      expect(result.outcome).toBe('solved');
      const { fits } = reference.description.expected;
      expect(result.fits).toHaveLength(fits.length);
      fits.forEach((expected, k) => {
        compare(result.fits[k], expected, 1e-6);
      });
    },
    60_000,
  );
});

describe('NIST certified digits', () => {
  test.each([
    ['o01_ols_longley', 11],
    ['o02_ols_norris', 12],
  ])(
    '%s: %i digits of log relative error in every certified coefficient',
    async (name, digits) => {
      const reference = referenceCase(name);
      const certified = reference?.description.tool.certified;
      if (reference === null || certified === undefined) throw new Error(`${name} is shipped with the tests`);
      const { fits } = await rehearse(reference);
      const [fit] = fits;
      for (const [term, value] of Object.entries(certified.coefficients)) {
        const ours = term === 'intercept' ? fit.intercept : fit.coefficients[term];
        expect(
          -Math.log10(Math.abs((ours ?? Number.NaN) - value) / Math.abs(value) + 1e-16),
        ).toBeGreaterThanOrEqual(digits);
      }
    },
    60_000,
  );
});

async function rehearse(reference: ReferenceCase): Promise<ResultDocument> {
  const folder = mkdtempSync(join(scratch, `${reference.name}-`));
  const file = join(folder, 'case.fit.yaml');
  writeFileSync(file, specificationOf(reference, 1e-13));
  const out = join(folder, 'out');
  const rows = join(reference.folder, 'data.csv');
  await run(process.execPath, [
    programs.commonfit,
    'rehearse',
    file,
    '--rows',
    rows,
    '--by',
    'site',
    '--out',
    out,
  ]);
  return JSON.parse(readFileSync(join(out, 'result.json'), 'utf8')) as ResultDocument;
}

/** Relative to the value; coefficients that the reference has at exactly zero must be exactly zero. */
function compare(fit: ResultDocument['fits'][number], expected: ReferenceFit, tolerance: number): void {
  const near = (ours: number | null | undefined, value: number, what: string): void => {
    if (ours === null || ours === undefined) throw new Error(`${what} is missing`);
    if (value === 0) expect(ours, what).toBe(0);
    else expect(Math.abs(ours - value) / Math.abs(value), what).toBeLessThanOrEqual(tolerance);
  };
  near(fit.intercept, expected.intercept, 'intercept');
  expect(Object.keys(fit.coefficients).sort()).toEqual(Object.keys(expected.coefficients).sort());
  for (const [term, value] of Object.entries(expected.coefficients))
    near(fit.coefficients[term], value, term);
  near(fit.objective, expected.objective, 'objective');
  near(fit.deviance, expected.deviance, 'deviance');
}
