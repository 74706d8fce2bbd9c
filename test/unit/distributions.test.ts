import { describe, expect, test } from 'vitest';
import {
  chiSquaredUpper,
  fisherUpper,
  logGamma,
  normalUpper,
  normalUpperQuantile,
  studentTwoSided,
  studentUpperQuantile,
} from '../../numerics/distributions.js';

/** Values of R 4.2.2 (pnorm, pt, pchisq, pf, qnorm, qt, lgamma), printed to 17 digits; tails by `lower = FALSE`. */
const close = (value: number, expected: number): void => {
  expect(Math.abs(value - expected)).toBeLessThanOrEqual(1e-12 * Math.abs(expected));
};

describe('tail probabilities agree with R to twelve digits', () => {
  test.each([
    [0, 0.5],
    [0.1, 0.46017216272297101],
    [1, 0.15865525393145705],
    [1.96, 0.024997895148220428],
    [3, 0.0013498980316300946],
    [5, 2.8665157187919391e-7],
    [8, 6.2209605742717849e-16],
    [12, 1.776482112077679e-33],
  ])('normal beyond %f', (z, expected) => close(normalUpper(z), expected));

  test.each([
    [0.5, 1, 0.70483276469913358],
    [1, 2, 0.42264973081037427],
    [2.5, 10, 0.031446844236608776],
    [6, 57, 1.4383832890762362e-7],
    [40, 30, 1.3726045194406362e-27],
  ])('Student beyond ±%f with %i degrees of freedom', (t, df, expected) =>
    close(studentTwoSided(t, df), expected),
  );

  test.each([
    [0.1, 1, 0.75182963404584935],
    [3.84, 1, 0.050043521248705224],
    [14.3071646595, 5, 0.013771606538105281],
    [200, 100, 1.178450072097942e-8],
    [1000, 950, 0.12656502352653681],
  ])('χ² beyond %f with %i degrees of freedom', (x, df, expected) => close(chiSquaredUpper(x, df), expected));

  test.each([
    [0.5, 1, 5, 0.51108408043028075],
    [4, 3, 20, 0.022076999662362429],
    [10, 2, 500, 5.5165197239041226e-5],
    [1.2, 40, 4000, 0.18181167266863923],
  ])('F beyond %f with %i and %i degrees of freedom', (x, a, b, expected) =>
    close(fisherUpper(x, a, b), expected),
  );
});

test.each([
  [0.025, 1.9599639845400538],
  [0.005, 2.5758293035488999],
  [1e-10, 6.3613409024040557],
  [0.3, 0.52440051270804067],
])('the normal quantile with %f above it', (upper, expected) => close(normalUpperQuantile(upper), expected));

test.each([
  [0.025, 1, 12.706204736174707],
  [0.005, 3, 5.8409093097333562],
  [0.025, 30, 2.0422724563012382],
  [1e-6, 1000, 4.7816086204583499],
])('the Student quantile with %f above it, %i degrees of freedom', (upper, df, expected) =>
  close(studentUpperQuantile(upper, df), expected),
);

test('lower quantiles mirror upper ones', () => {
  expect(normalUpperQuantile(0.975)).toBe(-normalUpperQuantile(1 - 0.975));
});

test.each([
  [0.1, 2.252712651734206],
  [0.5, 0.57236494292470008],
  [3, Math.LN2],
  [10.5, 13.940625219403763],
  [1000, 5905.2204232091808],
])('ln Γ(%f)', (x, expected) => close(logGamma(x), expected));
