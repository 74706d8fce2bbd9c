import { Cluster, type ClusterPlan, type RunPlan } from './cluster.js';
import { checkRun, type Ending } from './invariants.js';

const known = new Map<string, Promise<Ending>>();

/** How the run ends where nothing goes wrong and every message takes the same time. */
export function undisturbed(plan: Pick<ClusterPlan, 'policy' | 'sharded'>, run: RunPlan): Promise<Ending> {
  const { policy, sharded } = plan;
  const key = JSON.stringify([policy, sharded, { ...run, submitAtMs: 0 }]);
  const before = known.get(key) ?? play(plan, run);
  known.set(key, before);
  return before;
}

async function play(
  { policy, sharded }: Pick<ClusterPlan, 'policy' | 'sharded'>,
  run: RunPlan,
): Promise<Ending> {
  const cluster = new Cluster({
    seed: 1,
    distance: 'even',
    policy,
    sharded,
    runningMost: 1,
    workerMemoryNumbers: 1_000_000,
    slowSite: null,
    joinsLate: null,
    runs: [{ ...run, submitAtMs: 0 }],
  });
  await cluster.play(600_000);
  if (!cluster.ended) throw new Error(`${run.model} does not end even undisturbed`);
  const ending = await checkRun(cluster, cluster.stored[0]);
  if (ending === null || cluster.violations.length > 0) throw new Error(cluster.violations.join('\n'));
  return ending;
}
