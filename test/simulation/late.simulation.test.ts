import { describe, expect, test } from 'vitest';
import { Cluster, type ClusterPlan, type RunPlan } from './cluster.js';
import { checkRun } from './invariants.js';
import { sameOptimum } from './judge.js';
import { SITES } from './models.js';
import { plainRun } from './plan.js';
import { undisturbed } from './undisturbed.js';

const CALM: Omit<ClusterPlan, 'seed' | 'policy' | 'runs'> = {
  distance: 'near',
  sharded: false,
  runningMost: 1,
  workerMemoryNumbers: 1_000_000,
  slowSite: null,
  joinsLate: null,
};

async function played(plan: ClusterPlan, disturb: (cluster: Cluster) => void = () => {}) {
  const cluster = new Cluster(plan);
  disturb(cluster);
  await cluster.play(3_600_000);
  const [stored] = cluster.stored;
  const ending = await checkRun(cluster, stored);
  expect(cluster.violations).toEqual([]);
  if (ending === null) throw new Error('the run has no ending');
  return { ...ending, log: stored.log };
}

describe('stragglers in a cluster', () => {
  const quorum = { sites: 3, oldest: 40 };

  test.each([
    ['poisson elastic net', 'open', 'curvature'],
    ['logistic ridge', 'default', 'proximal'],
  ] as const)(
    '%s under the %s policy: a slow site is asked less, and the optimum is the same',
    async (model, policy, rung) => {
      for (const seed of [1, 2, 3]) {
        const run: RunPlan = { ...plainRun({ model }, SITES), quorum };
        const plan = { ...CALM, seed, policy, slowSite: 'castlefen', runs: [run] };
        const { result, log } = await played(plan);
        expect(result).toMatchObject({ outcome: 'solved', rung });
        expect(sameOptimum(result, await undisturbed(plan, plainRun(run, SITES)))).toBeNull();
        const late = log.flatMap((event) => (event.event === 'round' ? event.standIns : []));
        expect(new Set(late.map(({ site }) => site))).toContain('castlefen');
        const down = Object.fromEntries(result.numbersSent.map(({ site, up }) => [site, up]));
        expect(down.castlefen).toBeLessThan(down.harrowmere);
      }
    },
  );

  test.each([null, quorum])('a site that leaves for good is done without, quorum: %j', async (heard) => {
    const run: RunPlan = {
      ...plainRun({ model: 'poisson elastic net' }, SITES),
      quorum: heard,
      missing: 'go-without',
      patienceMinutes: 3,
    };
    const plan = { ...CALM, seed: 5, policy: 'open' as const, runs: [run] };
    const { result, log } = await played(plan, (cluster) => {
      const leave = (): void => {
        const begun = cluster.stored.some((one) => one.log.some(({ event }) => event === 'round'));
        if (begun) {
          cluster.gone.add('castlefen');
          cluster.workers.find(({ site }) => site === 'castlefen')?.kill();
        } else cluster.after(5, leave);
      };
      leave();
    });
    expect(result).toMatchObject({ outcome: 'solved', without: [{ site: 'castlefen' }] });
    expect(log.filter(({ event }) => event === 'without')).toHaveLength(1);
    const others = SITES.filter((site) => site !== 'castlefen');
    expect(sameOptimum(result, await undisturbed(plan, plainRun(run, others)))).toBeNull();
  });

  test('a site that joins after the roster is fixed takes no part, and one that is named is waited for', async () => {
    const run = plainRun({ model: 'logistic ridge' }, SITES);
    const late = { site: 'oakhythe', afterMs: 15_000 };
    const plan = { ...CALM, seed: 7, policy: 'open' as const, joinsLate: late };
    const named = await played({ ...plan, runs: [run] });
    expect(named.text).toBe((await undisturbed(plan, run)).text);
    const unnamed = await played({ ...plan, runs: [{ ...run, least: 3 }] });
    const others = ['castlefen', 'harrowmere', 'lindell-bay'];
    expect(unnamed.result.sites.map(({ site }) => site)).toEqual(others);
    expect(sameOptimum(unnamed.result, await undisturbed(plan, plainRun(run, others)))).toBeNull();
  });
});
