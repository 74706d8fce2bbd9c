import { describe, expect, test } from 'vitest';
import { curvatureRung } from '../../coordinator/consensus/curvature-rung.js';
import type { MethodAsk, MethodEnd } from '../../coordinator/consensus/method.js';
import { noPenalty } from '../../numerics/penalty.js';

/**
 * One site with φ(z) = 1 + √(1 + z²): convex, but a Newton step from z goes to −z³, so that from far out it overshoots
 * without bound. The own fit is answered with the quadratic at the same point, which proposes the same step.
 */
const value = (z: number): number => 1 + Math.hypot(1, z);
const slope = (z: number): number => z / Math.hypot(1, z);
const curvature = (z: number): number => Math.hypot(1, z) ** -3;

function solveFrom(start: number): { end: MethodEnd; points: number[][] } {
  const method = curvatureRung({
    p: 1,
    siteWeights: [1],
    penalty: noPenalty(1),
    start: Float64Array.of(start),
    tolerance: 1e-10,
    roundsMost: 100,
    quadratic: false,
    curvatureMayVanish: false,
    separatedBelow: null,
    curvatureMost: Number.POSITIVE_INFINITY,
    trialMatrices: 'all',
    sketch: { columns: 0, columnsMost: 0 },
    seed: 1,
  });
  const points: number[][] = [];
  let step = method.next();
  while (!step.done) {
    points.push(pointsOf(step.value));
    const at = points[points.length - 1];
    step = method.next({
      kind: 'evaluate',
      sites: [
        {
          points: at.map((z) => ({
            value: value(z),
            gradient: Float64Array.of(slope(z)),
            diagonal: Float64Array.of(curvature(z)),
            curvature: Float64Array.of(curvature(z)),
          })),
          sketch: null,
          ownFit: {
            curvature: Float64Array.of(curvature(start)),
            linear: Float64Array.of(curvature(start) * start - slope(start)),
          },
        },
      ],
    });
  }
  return { end: step.value, points };
}

function pointsOf(ask: MethodAsk): number[] {
  if (ask.kind !== 'evaluate') throw new Error(`the curvature rung asked for ${ask.kind}`);
  return ask.points.map(({ point }) => point[0]);
}

describe('steps that overshoot', () => {
  test('all trial points too long: the next round measures curvature at the best point of the line', () => {
    const { end, points } = solveFrom(4);
    // Newton from 4 steps by −4 (1 + 16) = −68; of the shorter steps, three hundredths (to 1.96) is the best
    expect(points[1][0]).toBeCloseTo(-64, 6);
    expect(points[2]).toHaveLength(1);
    expect(points[2][0]).toBeCloseTo(1.96, 6);
    expect(end.outcome).toBe('solved');
    expect(end.z[0]).toBeCloseTo(0, 6);
  });

  test('even the shortest step of the line too long: damping shortens the next ones, and the run is solved', () => {
    const { end, points } = solveFrom(40);
    // the line's shortest step goes 0.003 of −64,040, to −152: worse than 40
    expect(Math.abs(points[1][0])).toBeGreaterThan(60_000);
    expect(points[1].every((z) => value(z) > value(40))).toBe(true);
    expect(end.outcome).toBe('solved');
    expect(end.z[0]).toBeCloseTo(0, 5);
  });
});
