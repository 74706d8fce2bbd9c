import { describe, expect, test } from 'vitest';
import { Acceleration, type Extrapolation } from '../../coordinator/consensus/acceleration.js';
import { Anderson } from '../../coordinator/consensus/anderson.js';
import { SiteMetric } from '../../coordinator/consensus/site-metric.js';

const RELAXATION = 1.6;

/** One application of the map at s with the plain image s + step: one site, unit metric, z = 0. */
function applyOnce(acceleration: Acceleration, s: Float64Array, step: Float64Array): Float64Array {
  const metric = new SiteMetric([1], new Float64Array(s.length).fill(1));
  const x = step.map((value) => value / RELAXATION);
  return acceleration.next({ metric, s: [s], z: new Float64Array(s.length), centers: [s], x: [x] })[0];
}

/** An extrapolation that proposes whatever the test says, and counts what it is told. */
class Scripted implements Extrapolation {
  readonly growthMost = 1;
  rejections = 0;
  clears = 0;
  constructor(readonly proposals: (Float64Array | null)[]) {}
  propose(): Float64Array[] | null {
    const next = this.proposals.shift() ?? null;
    return next === null ? null : [next];
  }
  rejected(): void {
    this.rejections++;
  }
  clear(): void {
    this.clears++;
  }
}

const rates = Float64Array.of(0.99, 0.9, 0.8, 0.7, 0.5);

describe('Anderson acceleration', () => {
  test('solves an affine map in about as many rounds as it has dimensions (Walker and Ni 2011, by GMRES)', () => {
    const residualAfter = (acceleration: Acceleration | null): number => {
      let s: Float64Array = new Float64Array(5);
      let size = 0;
      for (let k = 0; k < 10; k++) {
        // s ↦ 1 + rate (s − 1): fixed point (1, …, 1)
        const step = s.map((value, j) => (1 - rates[j]) * (1 - value));
        size = Math.hypot(...step);
        s = acceleration === null ? s.map((value, j) => value + step[j]) : applyOnce(acceleration, s, step);
      }
      return size;
    };
    expect(residualAfter(new Acceleration(new Anderson()))).toBeLessThan(1e-7);
    expect(residualAfter(null)).toBeGreaterThan(1e-3);
  });

  test('forgotten pairs do not count: the next image is plain', () => {
    const acceleration = new Acceleration(new Anderson());
    applyOnce(acceleration, Float64Array.of(0, 0), Float64Array.of(1, 0));
    acceleration.clear();
    expect(applyOnce(acceleration, Float64Array.of(2, 2), Float64Array.of(0.5, 0.5))).toEqual(
      Float64Array.of(2.5, 2.5),
    );
  });
});

describe('the safeguard', () => {
  test('takes a proposal, and keeps it while the residual does not grow', () => {
    const extrapolation = new Scripted([Float64Array.of(7), Float64Array.of(8)]);
    const acceleration = new Acceleration(extrapolation);
    expect(applyOnce(acceleration, Float64Array.of(0), Float64Array.of(1))).toEqual(Float64Array.of(7));
    expect(applyOnce(acceleration, Float64Array.of(7), Float64Array.of(0.9))).toEqual(Float64Array.of(8));
    expect(extrapolation.rejections).toBe(0);
  });

  test.each([
    ['has grown', 1.1],
    ['is not a number', Number.NaN],
  ])('throws a proposal away whose residual %s, for the plain image stored before it', (_, size) => {
    const extrapolation = new Scripted([Float64Array.of(7), Float64Array.of(8)]);
    const acceleration = new Acceleration(extrapolation);
    applyOnce(acceleration, Float64Array.of(0), Float64Array.of(1));
    expect(applyOnce(acceleration, Float64Array.of(7), Float64Array.of(size))).toEqual(Float64Array.of(1));
    expect(extrapolation.rejections).toBe(1);
    expect(acceleration.rejections).toBe(1);
  });

  test('a plain image may have a larger residual: only proposals are judged', () => {
    const acceleration = new Acceleration(new Scripted([]));
    applyOnce(acceleration, Float64Array.of(0), Float64Array.of(1));
    expect(applyOnce(acceleration, Float64Array.of(1), Float64Array.of(3))).toEqual(Float64Array.of(4));
  });

  test('three times thirty rounds without halving: plain images from then on', () => {
    const proposals = Array.from({ length: 200 }, () => Float64Array.of(-1));
    const acceleration = new Acceleration(new Scripted(proposals));
    const taken: Float64Array[] = [];
    // residuals that fall, but too slowly ever to halve within thirty rounds
    for (let k = 0; k < 120; k++)
      taken.push(applyOnce(acceleration, Float64Array.of(0), Float64Array.of(0.999 ** k)));
    expect(taken[10]).toEqual(Float64Array.of(-1));
    for (let k = 100; k < 120; k++) expect(taken[k][0]).toBeCloseTo(0.999 ** k, 12);
  });
});
