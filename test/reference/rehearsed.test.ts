import { execFile } from 'node:child_process';
import { mkdtempSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { promisify } from 'node:util';
import { afterAll, describe, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { fitInProcess } from '../support/in-process-fit.js';
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
  'o13_huber_phones',
] as const;
/** Through real processes every day; the others in this process, and everywhere under COMMONFIT_LONG=1. */
const THROUGH_PROCESSES: readonly string[] =
  process.env.COMMONFIT_LONG === '1'
    ? CASES
    : ['o01_ols_longley', 'o02_ols_norris', 'o07_logistic_birthwt', 'o09_poisson_offset_insurance'];
/** What the specifications ask: the coefficients are to have eight digits. */
const TOLERANCE = 1e-10;

const run = promisify(execFile);
const scratch = mkdtempSync(join(tmpdir(), 'commonfit-reference-'));
afterAll(() => rmSync(scratch, { recursive: true, force: true }));

/** One run of each case serves every check of it; two at a time, each with a process for every site. */
const rehearsals = new Map<string, Promise<ResultDocument>>();
const lanes: Promise<unknown>[] = [Promise.resolve(), Promise.resolve()];
function rehearsed(reference: ReferenceCase): Promise<ResultDocument> {
  const known = rehearsals.get(reference.name);
  if (known !== undefined) return known;
  const lane = rehearsals.size % lanes.length;
  const made = lanes[lane].then(() => rehearse(reference, specificationOf(reference, TOLERANCE)));
  lanes[lane] = made.catch(() => undefined);
  rehearsals.set(reference.name, made);
  return made;
}

describe('the whole fit', () => {
  for (const name of CASES) {
    const reference = referenceCase(name);
    const check = reference === null ? test.skip : test.concurrent;
    const through = THROUGH_PROCESSES.includes(name);
    check(
      `${name} comes out to 1e-8 relative in every coefficient ${through ? 'through real processes' : 'in this process'}`,
      async () => {
        if (reference === null) throw new Error('skipped');
        compare(await (through ? rehearsed(reference) : inThisProcess(reference)), reference, 1e-8);
      },
      120_000,
    );
  }
});

test('the diabetes lasso comes out of the rung sketched through real processes', async () => {
  const reference = referenceCase('o05_lasso_path_diabetes');
  if (reference === null) throw new Error('this case is shipped with the tests');
  const result = await rehearse(reference, specificationOf(reference, 1e-13, 'sketched'));
  expect(result.rung).toBe('sketched');
  for (const fit of result.fits)
    expect(fit).toMatchObject({ rung: 'sketched', certificate: { kind: 'sketched' } });
  compare(result, reference, 1e-6);
}, 120_000);

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
      const { fits } = await rehearsed(reference);
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

/** Losses that are not quadratic; the others are solved by the first curvature matrix on any rung. */
const LOWER_RUNGS = CASES.slice(CASES.indexOf('o07_logistic_birthwt')).flatMap((name) => [
  { name, rung: 'curvature', matrices: 'any number of', curvatureMost: null },
  { name, rung: 'proximal', matrices: 'any number of', curvatureMost: null },
  { name, rung: 'proximal', matrices: 'three', curvatureMost: 3 },
]);

describe('rungs in this process', () => {
  for (const { name, rung, matrices, curvatureMost } of LOWER_RUNGS) {
    const reference = referenceCase(name);
    test.skipIf(reference === null)(
      `${name} comes out of the rung ${rung} to 1e-6 where ${matrices} matrices may leave`,
      async () => {
        if (reference === null) throw new Error('skipped');
        const text = specificationOf(reference, TOLERANCE, rung);
        const result = await fitInProcess(text, join(reference.folder, 'data.csv'), curvatureMost);
        expect(result.rung).toBe(rung);
        compare(result, reference, 1e-6);
      },
    );
  }
});

/** As the sites of a rehearsal, which let any number of matrices leave. */
const inThisProcess = (reference: ReferenceCase): Promise<ResultDocument> =>
  fitInProcess(specificationOf(reference, TOLERANCE), join(reference.folder, 'data.csv'), null);

async function rehearse(reference: ReferenceCase, specification: string): Promise<ResultDocument> {
  const folder = mkdtempSync(join(scratch, `${reference.name}-`));
  const file = join(folder, 'case.fit.yaml');
  writeFileSync(file, specification);
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

function compare(result: ResultDocument, { description }: ReferenceCase, tolerance: number): void {
  const { fits } = description.expected;
  expect(result.outcome).toBe('solved');
  expect(result.fits).toHaveLength(fits.length);
  fits.forEach((expected, k) => {
    compareFit(result.fits[k], expected, tolerance);
  });
}

/** Relative to the value; coefficients that the reference has at exactly zero must be exactly zero. */
function compareFit(fit: ResultDocument['fits'][number], expected: ReferenceFit, tolerance: number): void {
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
  if (expected.deviance !== undefined) near(fit.deviance, expected.deviance, 'deviance');
}
