import { describe, expect, test } from 'vitest';
import { inverseOf, outerSum, quadraticForm, sandwiched } from '../../coordinator/inference/covariance.js';
import { heterogeneityOf } from '../../coordinator/inference/heterogeneity.js';
import {
  type Columns,
  coefficientsOf,
  covarianceOnOriginal,
} from '../../coordinator/inference/original-scale.js';
import { benjaminiHochberg, holm } from '../../coordinator/inference/tests.js';
import { leastOf, oneStandardErrorOf, pooledFolds } from '../../coordinator/run/cross-validation.js';
import { criterionValue } from '../../coordinator/run/information-criteria.js';

describe('adjusted p-values agree with R 4.2.2 p.adjust', () => {
  const pValues = [0.01, 0.04, 0.03, 0.005, 0.5];
  test('Holm', () => {
    for (const [i, value] of [0.04, 0.09, 0.09, 0.025, 0.5].entries())
      expect(holm(pValues)[i]).toBeCloseTo(value, 14);
  });
  test('Benjamini and Hochberg', () => {
    for (const [i, value] of [0.025, 0.05, 0.05, 0.025, 0.5].entries())
      expect(benjaminiHochberg(pValues)[i]).toBeCloseTo(value, 14);
  });
});

describe('heterogeneity', () => {
  test('two equal sites do not differ', () => {
    const one = { estimate: 0.3, standardError: 0.1 };
    const { q, i2, tau2, pValue, average } = heterogeneityOf([one, one]);
    expect([q, i2, tau2, pValue]).toEqual([0, 0, 0, 1]);
    expect(average.estimate).toBeCloseTo(0.3, 15);
    expect(average.standardError).toBeCloseTo(0.1 / Math.SQRT2, 15);
  });
  test('by hand: estimates 0 and 1 with standard errors 0.5 give Q = 2, I² = 1/2, τ² = 1/4', () => {
    const { q, i2, tau2 } = heterogeneityOf([
      { estimate: 0, standardError: 0.5 },
      { estimate: 1, standardError: 0.5 },
    ]);
    expect(q).toBeCloseTo(2, 14);
    expect(i2).toBeCloseTo(0.5, 14);
    expect(tau2).toBeCloseTo(0.25, 14);
  });
});

describe('covariances', () => {
  test('an inverse in very different units', () => {
    const inverse = inverseOf(Float64Array.of(4e12, 2e3, 2e3, 5e-6), 2);
    // det = 4e12 · 5e-6 − 4e6 = 1.6e7
    for (const [at, value] of [5e-6 / 1.6e7, -2e3 / 1.6e7, -2e3 / 1.6e7, 4e12 / 1.6e7].entries())
      expect(inverse?.[at] ?? 0).toBeCloseTo(value, 10);
  });
  test('a singular curvature has none', () => {
    expect(inverseOf(Float64Array.of(1, 1, 1, 1), 2)).toBeNull();
  });
  test('A B A and gᵀ C g by hand', () => {
    const a = Float64Array.of(2, 0, 0, 3);
    const b = outerSum([Float64Array.of(1, 2)], 2);
    expect([...sandwiched(a, b, 2)]).toEqual([4, 12, 12, 36]);
    expect(quadraticForm(Float64Array.of(1, 2, 2, 5), Float64Array.of(1, -1))).toBe(2);
  });
  test('on the original scale: var(b₀ − c b₁) with b₁ = θ₁ / s', () => {
    const columns: Columns = {
      names: ['(intercept)', 'x'],
      intercept: true,
      center: Float64Array.of(10),
      scale: Float64Array.of(2),
    };
    expect([...coefficientsOf(columns, Float64Array.of(1, 4))]).toEqual([1 - 20, 2]);
    // var θ = [1 .5; .5 4]: var b₁ = 1, cov(b₀, b₁) = .25 − 10, var b₀ = 1 − 2·10·.25 + 100
    expect([...covarianceOnOriginal(columns, Float64Array.of(1, 0.5, 0.5, 4))]).toEqual([
      96, -9.75, -9.75, 1,
    ]);
  });
});

describe('cross-validation', () => {
  const folds = pooledFolds(
    [
      { fold: '1', rows: 10 },
      { fold: '2', rows: 30 },
    ],
    [
      [4, 2, 1],
      [4, 3, 3],
    ],
  );
  test('means weigh folds by their rows', () => {
    expect(folds.mean).toEqual([4, 2.75, 2.5]);
    // √(Σ n (loss − mean)² / N / (F − 1)) for λ 3: √((10 · 2.25 + 30 · 0.25) / 40)
    expect(folds.standardError[2]).toBeCloseTo(Math.sqrt(0.75), 14);
  });
  test('the largest λ within one standard error of the least', () => {
    const lambdas = [1, 0.5, 0.1];
    const minimum = leastOf(folds.mean, lambdas);
    expect(minimum).toBe(2);
    expect(oneStandardErrorOf(folds, lambdas, 2)).toBe(1);
  });
  test('of ties the largest λ; a fit that did not solve never', () => {
    expect(leastOf([2, 1, 1 + 1e-15, Number.NaN], [8, 4, 2, 1])).toBe(1);
    expect(leastOf([Number.NaN], [1])).toBeNull();
  });
});

test('information criteria by hand', () => {
  const fit = { deviance: 100, rows: 50, degreesOfFreedom: 3, slopes: 2, columns: 10 };
  expect(criterionValue('aic', 'poisson', fit)).toBe(106);
  expect(criterionValue('bic', 'poisson', fit)).toBeCloseTo(100 + 3 * Math.log(50), 12);
  expect(criterionValue('extended-bic', 'poisson', fit)).toBeCloseTo(
    100 + 3 * Math.log(50) + 2 * Math.log(45),
    10,
  );
  expect(criterionValue('aic', 'squared', fit)).toBeCloseTo(50 * Math.log(2) + 6, 12);
});
