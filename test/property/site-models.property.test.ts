import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { symmetricTimes } from '../../coordinator/consensus/matrix.js';
import { SiteMetric } from '../../coordinator/consensus/site-metric.js';
import { SiteModels } from '../../coordinator/consensus/site-models.js';
import { leastSubgradient, noPenalty } from '../../numerics/penalty.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import { maxAbs, sumOf } from '../../numerics/vector.js';

const seeds = fc.integer({ min: 1, max: 1e6 });
const P = 4;
const K = 3;

/** A random positive definite p × p matrix with eigenvalues away from zero. */
function definite(random: Random): Float64Array {
  const root = Float64Array.from({ length: P * P }, () => random.normal());
  const out = new Float64Array(P * P);
  for (let i = 0; i < P; i++)
    for (let j = 0; j < P; j++) {
      for (let k = 0; k < P; k++) out[i * P + j] += root[i * P + k] * root[j * P + k] * 0.2;
      if (i === j) out[i * P + j] += 0.5;
    }
  return out;
}

/** K quadratic sites φ_i(x) = ½ xᵀA_i x − b_iᵀx, a lasso, and models that begin with given curvatures at zero. */
function scene(seed: number, exact: boolean) {
  const random = seededRandom(seed);
  const a = Array.from({ length: K }, () => definite(random));
  const b = Array.from({ length: K }, () => Float64Array.from({ length: P }, () => 0.5 * random.normal()));
  const gradient = (i: number, x: Float64Array): Float64Array =>
    symmetricTimes(a[i], x).map((value, j) => value - b[i][j]);
  const g = noPenalty(P);
  g.l1.fill(0.1, 1);
  const zero = new Float64Array(P);
  const diagonal = new Float64Array(P).fill(3);
  const models = new SiteModels(
    g,
    a.map(() => zero),
    a.map((_, i) => gradient(i, zero)),
    a.map((own) => (exact ? Float64Array.from(own) : definite(random))),
    diagonal,
  );
  const metric = new SiteMetric([0.2, 0.3, 0.5], diagonal);
  return { random, gradient, g, zero, models, metric };
}

describe('models of the sites', () => {
  test('with exact curvature, the step is the optimum and the duals are the gradients there', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const { gradient, g, zero, models, metric } = scene(seed, true);
        const s = models.step(metric, zero);
        if (s === null) throw new Error('the models are positive definite');
        const z = metric.consensus(g, s);
        const there = s.map((_, i) => gradient(i, z));
        expect(maxAbs(leastSubgradient(g, z, sumOf(there)))).toBeLessThan(1e-9);
        metric.withDuals(z, there).forEach((own, i) => {
          own.forEach((value, j) => {
            expect(value).toBeCloseTo(s[i][j], 8);
          });
        });
      }),
      { numRuns: 50 },
    );
  });

  test('after p secants of quadratic sites the models are exact (Conn, Gould, Toint 1991)', () => {
    fc.assert(
      fc.property(seeds, (seed) => {
        const { random, gradient, g, zero, models, metric } = scene(seed, false);
        for (let k = 0; k < P; k++) {
          const points = metric.scales.map(() => Float64Array.from({ length: P }, () => random.normal()));
          models.learn(
            points,
            points.map((point, i) => gradient(i, point)),
          );
        }
        const s = models.step(metric, zero);
        if (s === null) throw new Error('the models are positive definite');
        const z = metric.consensus(g, s);
        const left = leastSubgradient(g, z, sumOf(s.map((_, i) => gradient(i, z))));
        expect(maxAbs(left)).toBeLessThan(1e-5);
      }),
      { numRuns: 50 },
    );
  });

  test('a step beyond the trust radius is cut: no step moves the linear predictor by more than it', () => {
    const { g, zero, metric } = scene(1, true);
    const flat = new Float64Array(P * P);
    for (let j = 0; j < P; j++) flat[j * P + j] = 1e-3;
    const steep = [0, 1, 2].map(() => new Float64Array(P).fill(-5));
    const models = new SiteModels(
      g,
      steep.map(() => zero),
      steep,
      steep.map(() => flat),
      metric.diagonal,
    );
    const s = models.step(metric, zero);
    if (s === null) throw new Error('the models are positive definite');
    const z = metric.consensus(g, s);
    const moved = Math.sqrt(z.reduce((sum, value) => sum + 3e-3 * value * value, 0) / 3);
    expect(moved).toBeCloseTo(2, 6);
  });
});
