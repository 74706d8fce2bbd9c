import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { Cluster } from './cluster.js';
import { checkRun } from './invariants.js';
import { type ModelName, type PolicyName, SITES } from './models.js';
import { plainRun } from './plan.js';
import { undisturbed } from './undisturbed.js';

/** Each rung, what finishes it, and several λ in one run. */
const CASES: readonly (readonly [ModelName, PolicyName, string])[] = [
  ['poisson elastic net', 'default', 'proximal'],
  ['poisson list', 'closed', 'proximal'],
  ['logistic ridge', 'open', 'curvature'],
  ['squared plain', 'default', 'pooled'],
  ['squared list', 'closed', 'proximal'],
];

describe('answers in any order, after any delay', () => {
  test.each(CASES)('%s under the %s policy gives the same bytes', async (model, policy, rung) => {
    const run = plainRun({ model }, SITES);
    const expected = await undisturbed({ policy, sharded: false }, run);
    expect(expected.result).toMatchObject({ outcome: 'solved', rung });
    await fc.assert(
      fc.asyncProperty(fc.nat(), fc.constantFrom('near', 'far', 'wild'), async (seed, distance) => {
        const cluster = new Cluster({
          seed,
          distance,
          policy,
          sharded: false,
          runningMost: 1,
          workerMemoryNumbers: 1_000_000,
          slowSite: null,
          joinsLate: null,
          runs: [run],
        });
        await cluster.play(3_600_000);
        expect(cluster.violations).toEqual([]);
        const ending = await checkRun(cluster, cluster.stored[0]);
        expect(cluster.violations).toEqual([]);
        expect(ending?.text).toBe(expected.text);
        expect(ending?.answers).toBe(expected.answers);
      }),
      { numRuns: 8 },
    );
  });
});
