import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { fitInProcess } from '../support/in-process-fit.js';
import { referenceCase, specificationOf } from '../support/reference-case.js';

/**
 * Tests of terms, profile intervals, margins, fit quality and the comparison of sites against R 4.2.2 on the reference
 * tables: drop1(glm, test = 'Chisq') and drop1(lm, test = 'F'); roots of the deviance with the coefficient held
 * (uniroot, tol 1e-14); means over rows with the delta method from vcov; residuals(type = 'pearson'), hatvalues,
 * anova(lm, lm); lm without one site. The values were made with these calls, not read from a book.
 */
const near = (ours: number | null | undefined, value: number, tolerance: number, what = ''): void => {
  if (ours === null || ours === undefined) throw new Error(`${what} is missing`);
  expect(Math.abs(ours - value) / Math.abs(value), what).toBeLessThanOrEqual(tolerance);
};

const birthweights = referenceCase('o07_logistic_birthwt');
const wages = referenceCase('o23_sandwich_cps');
const occupations = referenceCase('o24_heterogeneity_cps');

const fitOf = async (
  reference: NonNullable<typeof wages>,
  report: string,
  rung = 'highest',
  curvatureMost: number | null = null,
): Promise<ResultDocument> => {
  const text = `${specificationOf(reference, 1e-12, rung)}report: [${report}]\n`;
  return fitInProcess(text, join(reference.folder, 'data.csv'), curvatureMost);
};

describe.skipIf(birthweights === null)('low birth weight (o07), logistic', () => {
  const reference = birthweights as NonNullable<typeof birthweights>;

  test.each([
    ['highest', null, 1e-8],
    ['proximal', 3, 1e-5],
  ] as const)('likelihood-ratio tests of terms on the rung %s', async (rung, most, tolerance) => {
    const { inference } = await fitOf(reference, 'term-tests', rung, most);
    const expected: [string, number, number, number][] = [
      ['age', 0.64501932005265, 1, 0.421899],
      ['lwt', 5.5196186741874, 1, 0.018804],
      ['race', 7.46800508287816, 2, 0.023897],
      ['smoke', 5.62129777791807, 1, 0.017744],
      ['ptl', 2.54622409147265, 1, 0.110558],
      ['ht', 7.52052831033865, 1, 0.0061],
      ['ui', 2.7422910575944, 1, 0.097725],
      ['ftv', 0.14215614793108, 1, 0.706147],
    ];
    for (const [term, statistic, degrees, pValue] of expected) {
      const ours = inference?.terms.find((one) => one.term === term);
      near(ours?.statistic, statistic, tolerance, term);
      expect(ours?.degreesOfFreedom).toBe(degrees);
      expect(ours?.pValue).toBeCloseTo(pValue, 5);
    }
  });

  test('profile intervals', async () => {
    const { inference } = await fitOf(reference, 'covariance, {profile: [lwt, smoke]}');
    const of = (name: string) => inference?.profile.find((one) => one.name === name);
    near(of('lwt')?.lower, -0.0297839843769358, 1e-6, 'lwt from');
    near(of('lwt')?.upper, -0.00246474987682498, 1e-6, 'lwt to');
    near(of('smoke')?.lower, 0.16158114495865, 1e-6, 'smoke from');
    near(of('smoke')?.upper, 1.74786990591514, 1e-6, 'smoke to');
  });

  test('marginal means and effects by the delta method', async () => {
    const { inference } = await fitOf(reference, 'covariance, margins');
    const means: [string, number, number][] = [
      ['1', 0.22459043021358, 0.0411470699681953],
      ['2', 0.458397677827235, 0.0904656262958897],
      ['3', 0.378703656297998, 0.0592004242677051],
    ];
    for (const [level, estimate, error] of means) {
      const ours = inference?.marginalMeans.find((one) => one.term === 'race' && one.level === level);
      near(ours?.estimate, estimate, 1e-9, level);
      near(ours?.standardError, error, 1e-8, level);
    }
    const effect = inference?.marginalEffects.find(({ term }) => term === 'lwt');
    near(effect?.estimate, -0.00274818473558402, 1e-9, 'effect');
    near(effect?.standardError, 0.00117957323728593, 1e-8, 'its error');
  });

  test('deviance, dispersion, leverage', async () => {
    const { fitQuality } = await fitOf(reference, 'covariance, fit-quality');
    near(fitQuality?.deviance, 201.284795055881, 1e-10, 'deviance');
    near(fitQuality?.nullDeviance, 234.671996193219, 1e-10, 'null deviance');
    near(fitQuality?.pearsonDispersion, 1.02287738702538, 1e-9, 'dispersion');
    const leverages = [0.0537964144458868, 0.0543916181337185, 0.0549175689437147, 0.0481085362550386];
    for (const [i, value] of leverages.entries())
      near(fitQuality?.leverage[i].mean, value, 1e-8, `site ${i}`);
  });
});

test.skipIf(wages === null)('F tests of terms of a least-squares fit (o23)', async () => {
  const { inference } = await fitOf(wages as NonNullable<typeof wages>, 'term-tests');
  // F = (change of the residual sum of squares) / (RSS / (N − p)), N = 534, p = 4
  const scale = 111.792561231219 / 530;
  const expected: [string, number][] = [
    ['education', 29.1899774030308 / scale],
    ['experience', 8.17275399356375 / scale],
    ['union', 5.25822440709375 / scale],
  ];
  for (const [term, statistic] of expected)
    near(inference?.terms.find((one) => one.term === term)?.statistic, statistic, 1e-9, term);
  expect(inference?.terms.find(({ term }) => term === 'experience')?.pValue).toBeCloseTo(9.8191e-10, 13);
});

describe.skipIf(occupations === null)('wages by occupation (o24), least squares', () => {
  const reference = occupations as NonNullable<typeof occupations>;
  const WITHOUT: [string, [number, number, number]][] = [
    ['worker', [0.340752682127068, 0.112590418958354, 0.0111503199649245]],
    ['management', [0.710600005700987, 0.0871594010741295, 0.0109316480609328]],
    ['sales', [0.637227911256207, 0.0952061830105019, 0.0110763795643359]],
    ['office', [0.525608715129553, 0.102769508008254, 0.0123670133916236]],
    ['services', [0.640704538087917, 0.0941237601737845, 0.0129262139716305]],
    ['technical', [0.680782991695179, 0.0869827275893682, 0.0121624208909577]],
  ];

  for (const [rung, most, tolerance] of [
    ['highest', null, 1e-9],
    ['curvature', null, 1e-9],
  ] as const)
    test(`one common model, and the fit without each site, on the rung ${rung}`, async () => {
      const { comparison } = await fitOf(reference, 'covariance, compare-sites', rung, most);
      near(comparison?.commonModel?.statistic, 4.71229, 1e-5, 'F');
      near(comparison?.commonModel?.pValue, 1.4792e-8, 1e-4, 'p');
      expect(comparison?.commonModel?.degreesOfFreedom).toBe(15);
      for (const [site, values] of WITHOUT) {
        const ours = comparison?.sites.find((one) => one.site === site)?.leftOut;
        for (const [k, name] of ['(intercept)', 'education', 'experience'].entries())
          near(ours?.[name].estimate, values[k], tolerance, `${name} without ${site}`);
      }
      expect(comparison?.words.join(' ')).toContain('The sites do not share one model');
    });
});

const phones = referenceCase('o13_huber_phones');
test.skipIf(phones === null)(
  'a Huber loss has no likelihood: nothing that needs one is said (o13)',
  async () => {
    const { inference, comparison, omitted } = await fitOf(
      phones as NonNullable<typeof phones>,
      'sandwich, term-tests, compare-sites',
    );
    expect(inference?.covariances.map(({ kind }) => kind)).toEqual(['hc0', 'hc1', 'site', 'site-g1']);
    expect([inference?.used, inference?.terms]).toEqual(['hc1', []]);
    expect(comparison?.commonModel).toBeNull();
    expect(comparison?.sites.every(({ own }) => own === null)).toBe(true);
    expect(omitted.map(({ part }) => part)).toEqual(['tests of terms', 'test of one common model']);
  },
);
