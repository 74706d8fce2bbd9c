import { type Random, seededRandom } from '../../numerics/random.js';
import type { ClusterPlan, RunPlan } from './cluster.js';
import { one } from './faults.js';
import { MODELS, POLICIES, SITES } from './models.js';

const SITE_SETS = [SITES, SITES.slice(0, 3), SITES.slice(2)];
/** Longer than all faults of a seed together. */
const PATIENT_MINUTES = 60;
export const IMPATIENT_MINUTES = 3;

/** A run that waits for every site it names, and stops where one is missing. */
export const plainRun = ({ model }: Pick<RunPlan, 'model'>, sites: readonly string[]): RunPlan => ({
  model,
  patienceMinutes: PATIENT_MINUTES,
  sites,
  least: null,
  quorum: null,
  missing: 'stop',
  submitAtMs: 0,
});

/** Everything of a seed but its faults. `impatientAbout`: a site that will be given up on. */
export function planOf(seed: number, random: Random, impatientAbout: string | null): ClusterPlan {
  const runs = Array.from({ length: random.uniform() < 0.4 ? 2 : 1 }, (_, index): RunPlan => {
    const sites = one(random, SITE_SETS);
    const impatient = impatientAbout !== null && sites.includes(impatientAbout);
    return {
      ...plainRun({ model: one(random, MODELS) }, sites),
      patienceMinutes: impatient ? IMPATIENT_MINUTES : PATIENT_MINUTES,
      submitAtMs: index === 0 ? 0 : 3000 * random.uniform(),
    };
  });
  const plan: ClusterPlan = {
    seed,
    distance: one(random, ['even', 'near', 'far', 'wild'] as const),
    policy: one(random, POLICIES),
    sharded: random.uniform() < 0.25,
    runningMost: one(random, [1, 8]),
    workerMemoryNumbers: one(random, [0, 12, 1_000_000]),
    slowSite: null,
    joinsLate: null,
    runs,
  };
  return withStragglers(plan, seed, impatientAbout !== null);
}

/** Drawn apart from all else, so that what is found under a seed stays under that seed. */
const STRAGGLERS = 2 ** 40;

/** Quorums, going without a site, sites that are not named, slow ones, and ones that join late. */
function withStragglers(plan: ClusterPlan, seed: number, oneIsGivenUp: boolean): ClusterPlan {
  const random = seededRandom(STRAGGLERS + seed);
  const runs = plan.runs.map((run): RunPlan => {
    const quorum =
      random.uniform() < 0.4 ? { sites: run.sites.length - 1, oldest: one(random, [1, 5, 40]) } : null;
    const missing = random.uniform() < 0.5 ? 'go-without' : 'stop';
    const least = random.uniform() < 0.15 ? run.sites.length - 1 : null;
    // whoever is there takes part, the site that is given up on too
    const patienceMinutes = least !== null && oneIsGivenUp ? IMPATIENT_MINUTES : run.patienceMinutes;
    return { ...run, quorum, missing, least, patienceMinutes };
  });
  const slowSite = random.uniform() < 0.5 ? one(random, SITES) : null;
  const joinsLate =
    random.uniform() < 0.3 ? { site: one(random, SITES), afterMs: 20_000 * random.uniform() } : null;
  return { ...plan, runs, slowSite, joinsLate };
}
