import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { symmetricTimes } from '../../coordinator/consensus/matrix.js';
import { diagonalOf } from '../../coordinator/consensus/metric.js';
import { SketchDirections } from '../../coordinator/consensus/sketch-directions.js';
import { SketchModel } from '../../coordinator/consensus/sketch-model.js';
import { SketchedCurvature } from '../../coordinator/consensus/sketched-curvature.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import { dot, maxAbs, subtract } from '../../numerics/vector.js';

const seeds = fc.integer({ min: 1, max: 1e6 });
const sizes = fc.record({ p: fc.integer({ min: 1, max: 9 }), m: fc.integer({ min: 1, max: 4 }) });

const normals = (random: Random, count: number): Float64Array =>
  Float64Array.from({ length: count }, () => random.normal());

const columnsOf = (random: Random, p: number, m: number): Float64Array[] =>
  Array.from({ length: m }, () => normals(random, p));

/** A random positive definite matrix, columns on scales from 1 to 30. */
function definite(random: Random, p: number): Float64Array {
  const root = normals(random, p * p);
  const scale = Array.from({ length: p }, () => 30 ** random.uniform());
  const out = new Float64Array(p * p);
  for (let i = 0; i < p; i++)
    for (let j = 0; j < p; j++) {
      for (let k = 0; k < p; k++) out[i * p + j] += (root[i * p + k] * root[j * p + k]) / p;
      out[i * p + j] = (out[i * p + j] + (i === j ? 0.3 : 0)) * scale[i] * scale[j];
    }
  return out;
}

/** Directions of whole cycles with what a quadratic answers, as the rung asks for them. */
function cycle(h: Float64Array, p: number, m: number, random: Random) {
  const curvature = new SketchedCurvature(diagonalOf(h, p));
  const directions = new SketchDirections(random, { columns: m, columnsMost: Number.POSITIVE_INFINITY });
  const asked: Float64Array[] = [];
  while (asked.length < p) {
    const s = directions.next(curvature.errors, curvature.diagonal);
    curvature.learnSketch(
      s,
      s.map((direction) => symmetricTimes(h, direction)),
    );
    directions.keep(s, curvature.diagonal);
    asked.push(...s);
  }
  return { curvature, asked, directions };
}

const expectNear = (got: Float64Array, wanted: Float64Array, share: number): void => {
  expect(maxAbs(subtract(got, wanted))).toBeLessThanOrEqual(share * maxAbs(wanted));
};

describe('a symmetric update of rank m', () => {
  test('gives B S = Y and keeps B symmetric, whatever B was', () => {
    fc.assert(
      fc.property(seeds, sizes, (seed, { p, m }) => {
        const random = seededRandom(seed);
        const h = definite(random, p);
        const diagonal = diagonalOf(h, p);
        // far below the curvature, so that SᵀR is positive definite and no update is skipped
        const model = new SketchModel(diagonal, 1e-3);
        const s = columnsOf(random, p, Math.min(m, p));
        const y = s.map((direction) => symmetricTimes(h, direction));
        model.learn(s, y, diagonal);
        for (const [k, direction] of s.entries())
          expectNear(symmetricTimes(model.matrix, direction), y[k], 1e-6);
        for (let i = 0; i < p; i++)
          for (let j = 0; j < i; j++) expect(model.matrix[i * p + j]).toBeCloseTo(model.matrix[j * p + i], 9);
      }),
      { numRuns: 100 },
    );
  });

  test('a product that is not finite changes nothing', () => {
    const model = new SketchModel(Float64Array.of(1, 2), 1);
    model.learn([Float64Array.of(1, 0)], [Float64Array.of(Number.NaN, 1)], Float64Array.of(1, 2));
    model.learn([new Float64Array(2)], [Float64Array.of(1, 1)], Float64Array.of(1, 2));
    expect(model.matrix).toEqual(Float64Array.of(1, 0, 0, 2));
  });
});

describe('a curvature that is constant', () => {
  test('is known exactly by both models once p directions are measured (Conn, Gould, Toint 1991)', () => {
    fc.assert(
      fc.property(seeds, sizes, (seed, { p, m }) => {
        const random = seededRandom(seed);
        const h = definite(random, p);
        const { curvature } = cycle(h, p, m, random);
        expectNear(curvature.stepMetric(), h, 1e-6);
        expectNear(curvature.certificateMetric(), h, 1e-6);
      }),
      { numRuns: 100 },
    );
  });

  test('is learned from differences of gradients as from products', () => {
    fc.assert(
      fc.property(seeds, fc.integer({ min: 1, max: 6 }), (seed, p) => {
        const random = seededRandom(seed);
        const h = definite(random, p);
        const curvature = new SketchedCurvature(diagonalOf(h, p));
        const standing = (z: Float64Array) => ({
          z,
          loss: 0,
          objective: 0,
          gradient: symmetricTimes(h, z),
        });
        const from = standing(normals(random, p));
        const steps = columnsOf(random, p, p);
        for (const step of steps)
          curvature.learnSecant(from, standing(from.z.map((value, j) => value + 0.1 * step[j])), null, true);
        for (const step of steps)
          expectNear(symmetricTimes(curvature.stepMetric(), step), symmetricTimes(h, step), 1e-3);
      }),
      { numRuns: 100 },
    );
  });

  test('before it is measured, the certificate credits it with less than the step does', () => {
    const curvature = new SketchedCurvature(Float64Array.of(2, 5));
    expect(curvature.stepMetric()).toEqual(Float64Array.of(2, 0, 0, 5));
    const cautious = curvature.certificateMetric();
    expect(cautious[0]).toBeCloseTo(0.006, 12);
    expect(cautious[3]).toBeCloseTo(0.015, 12);
  });
});

describe('rescaling', () => {
  test('follows the diagonal, and by a factor of nine at most in one round', () => {
    const curvature = new SketchedCurvature(Float64Array.of(2, 5));
    curvature.follow(Float64Array.of(4, 5000));
    const [first, , , second] = curvature.stepMetric();
    expect(first).toBeCloseTo(4, 12);
    expect(second).toBeCloseTo(45, 12);
  });
});

describe('directions', () => {
  test('of one cycle are orthonormal in the D-norm, p of them, and then begin anew', () => {
    fc.assert(
      fc.property(seeds, sizes, (seed, { p, m }) => {
        const random = seededRandom(seed);
        const h = definite(random, p);
        const { curvature, asked, directions } = cycle(h, p, m, random);
        const { diagonal } = curvature;
        expect(asked).toHaveLength(p);
        for (const [i, a] of asked.entries())
          for (const [j, b] of asked.entries()) {
            const weighted = b.map((value, k) => value * diagonal[k]);
            expect(dot(a, weighted)).toBeCloseTo(i === j ? 1 : 0, 9);
          }
        expect(directions.next([], diagonal)).toHaveLength(Math.min(m, p));
      }),
      { numRuns: 100 },
    );
  });

  test('begin where the model was most wrong', () => {
    const directions = new SketchDirections(seededRandom(1), { columns: 1, columnsMost: 9 });
    const errors = [Float64Array.of(0.1, 0, 0), Float64Array.of(0, 0, -2)];
    const [first] = directions.next(errors, new Float64Array(3).fill(1));
    expect([...first].map(Math.abs)).toEqual([0, 0, 1]);
  });

  test('are no more in all than the budget, the last ask being cut to what is left', () => {
    const directions = new SketchDirections(seededRandom(1), { columns: 3, columnsMost: 5 });
    const ones = new Float64Array(6).fill(1);
    expect([1, 2, 3].map(() => directions.next([], ones).length)).toEqual([3, 2, 0]);
  });

  test('depend on the seed alone', () => {
    const drawn = (seed: number) =>
      new SketchDirections(seededRandom(seed), { columns: 2, columnsMost: 9 }).next(
        [],
        new Float64Array(4).fill(2),
      );
    expect(drawn(7)).toEqual(drawn(7));
    expect(drawn(7)).not.toEqual(drawn(8));
  });
});
