import { seededRandom } from '../../numerics/random.js';
import { Cluster, type ClusterPlan } from './cluster.js';
import { FaultSchedule, type Injected, one } from './faults.js';
import { judge } from './judge.js';
import { asFault, LASTING_KINDS, lastingOf } from './lasting.js';
import { SITES } from './models.js';
import { IMPATIENT_MINUTES, plainRun, planOf } from './plan.js';
import { undisturbed } from './undisturbed.js';

/** What one seed did, and what it broke. */
export interface SeedReport {
  readonly seed: number;
  readonly plan: ClusterPlan;
  readonly injected: readonly Injected[];
  readonly outcomes: readonly string[];
  /** What the coordinator noted in its operational log, by code, and how often. */
  readonly notices: ReadonlyMap<string, number>;
  /** Virtual time that passed. */
  readonly tookMs: number;
  readonly violations: readonly string[];
}

/** Asks that a run may take with a quorum or after a site is gone, as a multiple of those of the plain run. */
const MORE_ASKS = 5;

/** Plays everything that follows from the seed, and compares every run with the same run undisturbed. */
export async function playSeed(seed: number): Promise<SeedReport> {
  const random = seededRandom(seed);
  const lastingKind = random.uniform() < 0.25 ? one(random, LASTING_KINDS) : null;
  const faultySite = one(random, SITES);
  const plan = planOf(seed, random, lastingKind === 'gone' || lastingKind === 'liar' ? faultySite : null);
  const expected = await Promise.all(plan.runs.map((run) => undisturbed(plan, plainRun(run, run.sites))));
  const cluster = new Cluster(plan);
  const lasting = lastingKind === null ? null : lastingOf(lastingKind, faultySite, cluster, random);
  const asks = expected.reduce((sum, { asks }) => sum + asks, 0);
  const schedule = new FaultSchedule(
    cluster,
    random.integer(2 ** 48),
    1 + random.integer(lasting === null ? 14 : 5),
    asks * cluster.network.askMs * (0.02 + 0.4 * random.uniform()),
  );
  const slowAskMs = 2.2 * cluster.network.travelMostMs + 500;
  const asksMost = plan.runs.reduce(
    (sum, { quorum, missing }, index) =>
      sum + expected[index].asks * (quorum === null && missing === 'stop' ? 1 : MORE_ASKS),
    0,
  );
  const standstillMs =
    120_000 + asksMost * slowAskMs + (lasting === null ? 0 : IMPATIENT_MINUTES * 60_000 * plan.runs.length);
  const injected = (): Injected[] => [...asFault(lasting), ...schedule.injected];
  const report = (outcomes: readonly string[]): SeedReport => ({
    seed,
    plan,
    injected: injected(),
    outcomes,
    notices: cluster.notices,
    tookMs: cluster.nowMs,
    violations: cluster.violations,
  });
  try {
    await cluster.play(standstillMs);
  } catch (error) {
    cluster.violated(`a defect: ${error instanceof Error ? (error.stack ?? error.message) : String(error)}`);
    return report([]);
  }
  const outcomes: string[] = [];
  for (const [index, stored] of cluster.stored.entries())
    outcomes.push(await judge(cluster, plan, plan.runs[index], stored, lasting));
  if (cluster.stored.length < plan.runs.length) cluster.violated('a run was never submitted');
  return report(outcomes);
}
