import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import {
  estimatedCertificate,
  measuredCertificate,
  modelStep,
} from '../../coordinator/consensus/certificate.js';
import { symmetricTimes } from '../../coordinator/consensus/matrix.js';
import { definiteMetric, diagonalOf, flooredDiagonal } from '../../coordinator/consensus/metric.js';
import { balancingFactor } from '../../coordinator/consensus/residuals.js';
import { minimiseByActiveSet } from '../../numerics/active-set.js';
import { cholesky } from '../../numerics/cholesky.js';
import { minimiseQuadratic } from '../../numerics/coordinate-descent.js';
import {
  clipToBounds,
  leastSubgradient,
  noPenalty,
  type Penalty,
  penaltyValue,
  proximalOperator,
} from '../../numerics/penalty.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import { dot, maxAbs } from '../../numerics/vector.js';
import { zStepDiagonal, zStepFull } from '../../numerics/z-step.js';

const seeds = fc.integer({ min: 1, max: 1e6 });

/** A random positive definite matrix, a linear term and a penalty with kinks, ridges and (sometimes) bounds. */
function randomProblem(
  seed: number,
  bounded: boolean,
): { g: Penalty; m: Float64Array; b: Float64Array; p: number } {
  const random = seededRandom(seed);
  const p = 1 + random.integer(8);
  const root = Float64Array.from({ length: p * p }, () => random.normal());
  const m = new Float64Array(p * p);
  for (let i = 0; i < p; i++)
    for (let j = 0; j < p; j++) {
      for (let k = 0; k < p; k++) m[i * p + j] += root[i * p + k] * root[j * p + k];
      if (i === j) m[i * p + j] += 0.1;
    }
  const g = noPenalty(p);
  for (let j = 0; j < p; j++) {
    g.l1[j] = random.integer(3) === 0 ? 0 : random.uniform();
    g.l2[j] = random.integer(2) === 0 ? 0 : random.uniform();
    if (bounded && random.integer(2) === 0) g.lower[j] = -0.3 * random.uniform();
    if (bounded && random.integer(2) === 0) g.upper[j] = 0.3 * random.uniform();
  }
  return { g, m, b: randomVector(random, p), p };
}

const randomVector = (random: Random, p: number): Float64Array =>
  Float64Array.from({ length: p }, () => 2 * random.normal());

/** The objective of a z-step, written out. */
function objective(g: Penalty, m: Float64Array, b: Float64Array, z: Float64Array): number {
  return penaltyValue(g, z) + 0.5 * dot(z, symmetricTimes(m, z)) - dot(b, z);
}

describe('the consensus step', () => {
  test('with a full metric satisfies the optimality conditions of its problem', () => {
    fc.assert(
      fc.property(seeds, fc.boolean(), (seed, bounded) => {
        const { g, m, b, p } = randomProblem(seed, bounded);
        const z = zStepFull(g, m, b, new Float64Array(p));
        if (z === null) throw new Error('the metric is positive definite');
        const slope = symmetricTimes(m, z).map((value, j) => value - b[j]);
        expect(maxAbs(leastSubgradient(g, z, slope))).toBeLessThan(1e-9);
        expect(clipToBounds(g, z)).toEqual(z);
      }),
    );
  });

  test('no nearby point is better', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const { g, m, b, p } = randomProblem(seed, true);
        const z = minimiseQuadratic(g, m, b, new Float64Array(p));
        if (z === null) throw new Error('the sweeps settle');
        const random = seededRandom(seed + 1);
        const best = objective(g, m, b, z);
        for (let k = 0; k < 20; k++) {
          const near = clipToBounds(
            g,
            z.map((value) => value + 1e-3 * random.normal()),
          );
          expect(objective(g, m, b, near)).toBeGreaterThanOrEqual(best - 1e-12);
        }
      }),
    );
  });

  test('a search of the active set finds the same minimiser as coordinate descent, from anywhere', () => {
    fc.assert(
      fc.property(seeds, fc.boolean(), (seed, bounded) => {
        const { g, m, b, p } = randomProblem(seed, bounded);
        const random = seededRandom(seed + 1);
        const start = clipToBounds(
          g,
          Float64Array.from({ length: p }, () => random.normal()),
        );
        const z = minimiseByActiveSet(g, m, b, start);
        const twin = minimiseQuadratic(g, m, b, new Float64Array(p));
        if (z === null || twin === null) throw new Error('the metric is positive definite');
        const slope = symmetricTimes(m, z).map((value, j) => value - b[j]);
        expect(maxAbs(leastSubgradient(g, z, slope))).toBeLessThan(1e-9);
        expect(clipToBounds(g, z)).toEqual(z);
        expect(Math.abs(objective(g, m, b, z) - objective(g, m, b, twin))).toBeLessThanOrEqual(
          1e-12 * (1 + Math.abs(objective(g, m, b, twin))),
        );
      }),
    );
  });

  test('with a diagonal metric is the full step on that diagonal', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const { g, m, b, p } = randomProblem(seed, true);
        const diagonal = diagonalOf(m, p);
        const full = new Float64Array(p * p);
        diagonal.forEach((value, j) => {
          full[j * p + j] = value;
        });
        const expected = zStepFull(g, full, b, new Float64Array(p));
        const z = zStepDiagonal(g, diagonal, b);
        z.forEach((value, j) => {
          expect(value).toBeCloseTo(expected?.[j] ?? Number.NaN, 12);
        });
      }),
    );
  });

  test('a metric that is not positive definite is refused, not solved', () => {
    expect(
      zStepFull(noPenalty(2), Float64Array.of(1, 2, 2, 1), Float64Array.of(1, 1), new Float64Array(2)),
    ).toBeNull();
  });
});

describe('the proximal operator', () => {
  test('is the soft threshold: zero inside it, shrunk by it outside', () => {
    const g = { ...noPenalty(1), l1: Float64Array.of(1) };
    expect(proximalOperator(g, 0, 2, 0.9)).toBe(0);
    expect(proximalOperator(g, 0, 2, 3)).toBe(1);
    expect(proximalOperator(g, 0, 2, -3)).toBe(-1);
  });
});

describe('metrics', () => {
  test('any symmetric curvature becomes positive definite', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const random = seededRandom(seed);
        const p = 2 + random.integer(6);
        const m = new Float64Array(p * p);
        for (let i = 0; i < p; i++)
          for (let j = 0; j <= i; j++) {
            m[i * p + j] = i === j ? 0.5 + random.uniform() : random.normal();
            m[j * p + i] = m[i * p + j];
          }
        expect(cholesky(definiteMetric(m, flooredDiagonal(diagonalOf(m, p))), p)).not.toBeNull();
      }),
    );
  });

  test('a positive definite curvature is kept to nine digits', () => {
    const { m, p } = randomProblem(3, false);
    const metric = definiteMetric(m, flooredDiagonal(diagonalOf(m, p)));
    metric.forEach((value, k) => {
      expect(value).toBeCloseTo(m[k], 7);
    });
  });

  test('a column without curvature still has a positive diagonal', () => {
    expect(flooredDiagonal(Float64Array.of(2, 0))).toEqual(Float64Array.of(2, 2e-6));
    expect(flooredDiagonal(Float64Array.of(0, 0))).toEqual(Float64Array.of(1, 1));
  });
});

describe('certificates on a quadratic, whose gap is known exactly', () => {
  test('the measured certificate is never below the true gap', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const { g, m, b, p } = randomProblem(seed, false);
        const z = randomVector(seededRandom(seed + 7), p);
        const best = zStepFull(g, m, b, z);
        const gradient = symmetricTimes(m, z).map((value, j) => value - b[j]);
        const step = modelStep(g, m, gradient, z);
        if (best === null || step === null) throw new Error('the metric is positive definite');
        const gap = objective(g, m, b, z) - objective(g, m, b, best);
        const certificate = measuredCertificate(
          { penalty: g, curvatureMayVanish: false },
          z,
          gradient,
          step.decrement,
          objective(g, m, b, z),
        );
        expect(certificate.gap).toBeGreaterThanOrEqual(gap * (1 - 1e-9));
        expect(certificate.gap).toBeLessThanOrEqual(1.5 * gap * (1 + 1e-6) + 1e-12);
      }),
    );
  });

  test('the estimate covers the gap of uncorrelated columns thirty times', () => {
    const g = noPenalty(2);
    const z = Float64Array.of(1, -1);
    // ½(2 z₁² + 3 z₂²): gap 2.5 at z, gradient (2, −3)
    const certificate = estimatedCertificate(
      g,
      z,
      Float64Array.of(2, -3),
      Float64Array.of(2, 3),
      null,
      2.5,
      2.5,
    );
    expect(certificate.kind).toBe('estimate');
    expect(certificate.gap).toBeCloseTo(75, 12);
    expect(certificate.kkt).toBe(3);
  });

  test('the estimate is raised to ten times the decrement under learned models', () => {
    const z = Float64Array.of(1, -1);
    const [gradient, diagonal] = [Float64Array.of(2, -3), Float64Array.of(2, 3)];
    expect(estimatedCertificate(noPenalty(2), z, gradient, diagonal, 40, 2.5, 2.5).gap).toBe(400);
    expect(estimatedCertificate(noPenalty(2), z, gradient, diagonal, 4, 2.5, 2.5).gap).toBeCloseTo(75, 12);
  });
});

describe('residual balancing', () => {
  test('leaves balanced residuals alone, raises the metric where the primal one lags, and stops after twenty rounds', () => {
    expect(balancingFactor({ primal: 1, dual: 1.5 }, 1)).toBe(1);
    expect(balancingFactor({ primal: 9, dual: 1 }, 1)).toBe(3);
    expect(balancingFactor({ primal: 1, dual: 9 }, 1)).toBeCloseTo(1 / 3, 12);
    expect(balancingFactor({ primal: 1, dual: 1e-9 }, 20)).toBe(5);
    expect(balancingFactor({ primal: 9, dual: 1 }, 21)).toBe(1);
  });
});
