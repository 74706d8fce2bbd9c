import { execFile } from 'node:child_process';
import { mkdtempSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { promisify } from 'node:util';
import { afterAll, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { programs } from '../support/programs.js';
import { referenceCase, specificationOf } from '../support/reference-case.js';

const run = promisify(execFile);
const scratch = mkdtempSync(join(tmpdir(), 'commonfit-sketched-'));
afterAll(() => rmSync(scratch, { recursive: true, force: true }));

test('a rehearsal with `rung: sketched` gives the reference path of the diabetes lasso', async () => {
  const reference = referenceCase('o05_lasso_path_diabetes');
  if (reference === null) throw new Error('this case is shipped with the tests');
  const file = join(scratch, 'case.fit.yaml');
  writeFileSync(file, specificationOf(reference, 1e-13, 'sketched'));
  const out = join(scratch, 'out');
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
  const result = JSON.parse(readFileSync(join(out, 'result.json'), 'utf8')) as ResultDocument;
  expect(result).toMatchObject({ outcome: 'solved', rung: 'sketched' });
  reference.description.expected.fits.forEach((expected, k) => {
    const fit = result.fits[k];
    expect(fit).toMatchObject({ rung: 'sketched', certificate: { kind: 'sketched' } });
    for (const [term, value] of Object.entries(expected.coefficients)) {
      if (value === 0) expect(fit.coefficients[term], term).toBe(0);
      else expect(Math.abs(fit.coefficients[term] / value - 1), term).toBeLessThanOrEqual(1e-6);
    }
  });
}, 60_000);
