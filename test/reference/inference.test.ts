import { join } from 'node:path';
import { describe, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import type { CovarianceKind } from '../../coordinator/run/result-parts.js';
import { fitInProcess } from '../support/in-process-fit.js';
import { type ReferenceCase, referenceCase, specificationOf } from '../support/reference-case.js';

/**
 * Covariances, intervals, the choice of λ and the comparison of sites against the reference cases: solved in 220-bit
 * arithmetic, and by R (glm, sandwich, cv.glmnet, metafor); sources in test/reference/README.md and each case.json.
 */
const TOLERANCE = 1e-12;

interface ExpectedCovariance {
  readonly covariance: readonly (readonly number[])[];
  readonly standard_errors: Readonly<Record<string, number>>;
}
interface Expected {
  readonly order: readonly string[];
  readonly cov_model?: ExpectedCovariance;
  readonly cov_hc0?: ExpectedCovariance;
  readonly cov_cluster?: ExpectedCovariance;
  readonly cov_cluster_g1?: ExpectedCovariance;
  readonly wald_ci_95_normal?: Readonly<Record<string, readonly [number, number]>>;
  readonly wald_ci_95_t?: Readonly<Record<string, readonly [number, number]>>;
  readonly coefficients: Readonly<Record<string, number>>;
}

const described = async (reference: ReferenceCase, lines: string, rung?: string): Promise<ResultDocument> => {
  const text = `${specificationOf(reference, TOLERANCE, rung)}${lines}\n`;
  return fitInProcess(text, join(reference.folder, 'data.csv'), null);
};

const expectedOf = (reference: ReferenceCase): Expected =>
  reference.description.expected.fits[0] as unknown as Expected;

/** Our name of a reference coefficient. */
const nameOf = (name: string): string => (name === '(Intercept)' ? '(intercept)' : name);

const near = (ours: number | undefined, value: number, tolerance: number, what: string): void => {
  if (ours === undefined) throw new Error(`${what} is missing`);
  expect(Math.abs(ours - value) / Math.abs(value), what).toBeLessThanOrEqual(tolerance);
};

/** Longley's columns are so nearly aliased that a covariance through the curvature keeps six digits. */
const CASES = [
  ['o01_ols_longley', 'highest', 1e-5],
  ['o03_wls_states', 'highest', 1e-9],
  ['o07_logistic_birthwt', 'highest', 1e-9],
  ['o07_logistic_birthwt', 'proximal', 1e-6],
  ['o09_poisson_offset_insurance', 'highest', 1e-9],
  ['o23_sandwich_cps', 'highest', 1e-9],
] as const;

describe('covariances and intervals', () => {
  for (const [name, rung, tolerance] of CASES) {
    const reference = referenceCase(name);
    test.skipIf(reference === null)(`${name} on the rung ${rung}`, async () => {
      if (reference === null) throw new Error('skipped');
      const expected = expectedOf(reference);
      const { inference, omitted } = await described(reference, 'report: [covariance, sandwich]', rung);
      expect(omitted).toEqual([]);
      const kinds: [CovarianceKind, ExpectedCovariance | undefined][] = [
        ['model', expected.cov_model],
        ['hc0', expected.cov_hc0],
        ['site', expected.cov_cluster],
        ['site-g1', expected.cov_cluster_g1],
      ];
      for (const [kind, value] of kinds) {
        if (value === undefined) continue;
        const ours = inference?.covariances.find((one) => one.kind === kind);
        for (const [term, error] of Object.entries(value.standard_errors))
          near(ours?.standardErrors[nameOf(term)], error, tolerance, `${kind} ${term}`);
        const order = ours?.order ?? [];
        for (const [i, row] of value.covariance.entries())
          for (const [j, entry] of row.entries()) {
            const at = order.indexOf(nameOf(expected.order[i]));
            const to = order.indexOf(nameOf(expected.order[j]));
            const scale = Math.sqrt(value.covariance[i][i] * value.covariance[j][j]);
            const difference = Math.abs((ours?.covariance[at][to] ?? Number.NaN) - entry);
            expect(difference / scale, `${kind} ${i},${j}`).toBeLessThanOrEqual(10 * tolerance);
          }
      }
    });
  }

  const wages = referenceCase('o23_sandwich_cps');
  test.skipIf(wages === null)('clusters by a column that is the site are the sites (o23)', async () => {
    if (wages === null) throw new Error('skipped');
    const expected = expectedOf(wages);
    const { inference } = await described(wages, 'report: [{sandwich: {cluster: site}}]');
    const of = (kind: CovarianceKind) => inference?.covariances.find((one) => one.kind === kind);
    for (const [term, error] of Object.entries(expected.cov_cluster?.standard_errors ?? {}))
      near(of('cluster')?.standardErrors[nameOf(term)], error, 1e-9, term);
    for (const [term, error] of Object.entries(expected.cov_cluster_g1?.standard_errors ?? {}))
      near(of('cluster-g1')?.standardErrors[nameOf(term)], error, 1e-9, term);
    expect(of('cluster')?.clusters).toBe(6);
    expect(inference?.used).toBe('cluster-g1');
    // HC1 = HC0 · N / (N − p)
    for (const [term, error] of Object.entries(of('hc0')?.standardErrors ?? {}))
      near(of('hc1')?.standardErrors[term], error * Math.sqrt(534 / 530), 1e-12, term);
    expect(inference?.cautions.join(' ')).toContain('clustered over 6 clusters are not sound');
  });

  for (const name of [
    'o01_ols_longley',
    'o03_wls_states',
    'o07_logistic_birthwt',
    'o09_poisson_offset_insurance',
  ]) {
    const reference = referenceCase(name);
    test.skipIf(reference === null)(`${name}: Wald intervals`, async () => {
      if (reference === null) throw new Error('skipped');
      const expected = expectedOf(reference);
      const { inference } = await described(reference, 'report: [covariance]');
      // the published quantile 1.959964 has seven digits
      const intervals = expected.wald_ci_95_t ?? expected.wald_ci_95_normal ?? {};
      expect(Object.keys(intervals).length).toBeGreaterThan(0);
      for (const [term, [lower, upper]] of Object.entries(intervals)) {
        const own = inference?.coefficients.find((one) => one.name === nameOf(term));
        const width = upper - lower;
        expect(Math.abs((own?.lower ?? Number.NaN) - lower) / width, term).toBeLessThanOrEqual(1e-5);
        expect(Math.abs((own?.upper ?? Number.NaN) - upper) / width, term).toBeLessThanOrEqual(1e-5);
      }
    });
  }
});

interface CrossValidation {
  readonly lambda: readonly number[];
  readonly cv_mean: readonly number[];
  readonly cv_standard_error: readonly number[];
  readonly lambda_min: number;
  readonly lambda_1se: number;
  readonly fold_loss: readonly (readonly number[])[];
}

describe('the choice of λ', () => {
  const reference = referenceCase('o21_cv_lasso_diabetes');
  for (const rung of ['highest', 'curvature', 'proximal'])
    test.skipIf(reference === null)(`10 folds by a column, on the rung ${rung}`, async () => {
      if (reference === null) throw new Error('skipped');
      const { cross_validation: cv } = reference.description.expected as unknown as {
        cross_validation: CrossValidation;
      };
      const lambdas = JSON.stringify(cv.lambda);
      const text = specificationOf(reference, TOLERANCE, rung)
        .replace(/lambda: \[[^\]]*\]/, `lambda: ${lambdas}`)
        .concat('choose: {folds: {column: fold}, rule: one-standard-error}\n');
      const result = await fitInProcess(text, join(reference.folder, 'data.csv'), null);
      expect(result.outcome).toBe('solved');
      const choice = result.choice;
      for (const [l, mean] of cv.cv_mean.entries()) {
        near(choice?.crossValidation?.mean[l] ?? undefined, mean, 1e-8, `mean at λ ${cv.lambda[l]}`);
        near(
          choice?.crossValidation?.standardError[l] ?? undefined,
          cv.cv_standard_error[l],
          1e-8,
          `standard error at λ ${cv.lambda[l]}`,
        );
      }
      expect(cv.lambda[choice?.minimum ?? -1]).toBe(cv.lambda_min);
      expect(cv.lambda[choice?.chosen ?? -1]).toBe(cv.lambda_1se);
      if (rung === 'highest') expect([result.rung, result.rounds]).toEqual(['pooled', 1]);
    });
});

interface HeterogeneityCase {
  readonly coefficient: string;
  readonly per_site: Readonly<Record<string, { readonly estimate: number; readonly standard_error: number }>>;
  readonly inverse_variance_pooled: { readonly estimate: number; readonly standard_error: number };
  readonly Q: number;
  readonly df: number;
  readonly p_value: number;
  readonly I2_percent: number;
  readonly tau2_dersimonian_laird: number;
}

describe('the sites compared', () => {
  const reference = referenceCase('o24_heterogeneity_cps');
  test.skipIf(reference === null)("Cochran's Q, I² and τ² of per-site slopes (o24)", async () => {
    if (reference === null) throw new Error('skipped');
    const { heterogeneity: expected } = reference.description.expected as unknown as {
      heterogeneity: HeterogeneityCase;
    };
    const { comparison } = await described(reference, 'report: [compare-sites]');
    for (const [site, { estimate, standard_error }] of Object.entries(expected.per_site)) {
      const own = comparison?.sites.find((one) => one.site === site)?.own?.[expected.coefficient];
      near(own?.estimate, estimate, 1e-9, site);
      near(own?.standardError, standard_error, 1e-9, site);
    }
    const ours = comparison?.heterogeneity.find(({ name }) => name === expected.coefficient);
    near(ours?.q, expected.Q, 1e-9, 'Q');
    near(ours?.pValue, expected.p_value, 1e-9, 'p');
    near(100 * (ours?.i2 ?? Number.NaN), expected.I2_percent, 1e-9, 'I²');
    near(ours?.tau2, expected.tau2_dersimonian_laird, 1e-8, 'τ²');
    near(ours?.average.estimate, expected.inverse_variance_pooled.estimate, 1e-9, 'average');
    near(ours?.average.standardError, expected.inverse_variance_pooled.standard_error, 1e-9, 'its error');
  });
});

describe('an intercept at every site', () => {
  const reference = referenceCase('o22_fixed_effects_airlines');
  test.skipIf(reference === null)('within estimates and their errors (o22)', async () => {
    if (reference === null) throw new Error('skipped');
    const expected = expectedOf(reference);
    const { fits, inference } = await described(
      reference,
      'intercept: per-site\nreport: [covariance, sandwich]',
    );
    for (const [term, value] of Object.entries(expected.coefficients))
      near(fits[0].coefficients[term], value, 1e-9, term);
    const of = (kind: CovarianceKind) => inference?.covariances.find((one) => one.kind === kind);
    for (const term of Object.keys(expected.coefficients)) {
      near(of('model')?.standardErrors[term], expected.cov_model?.standard_errors[term] ?? 0, 1e-8, term);
      near(of('site')?.standardErrors[term], expected.cov_cluster?.standard_errors[term] ?? 0, 1e-8, term);
    }
  });
});
