import { type Random, seededRandom } from '../../numerics/random.js';
import { Cluster, type ClusterPlan, type RunPlan } from './cluster.js';
import { FaultSchedule, type Injected, one } from './faults.js';
import { checkRun, type Ending } from './invariants.js';
import { LIES, type Lie } from './lies.js';
import { MODELS, POLICIES, SITES } from './models.js';
import type { StoredRun } from './sim-coordinator.js';
import type { SimWorker } from './sim-worker.js';
import { undisturbed } from './undisturbed.js';

/** A fault that does not heal, and the worker or the run it is about. */
type Lasting =
  | { readonly kind: 'gone'; readonly worker: SimWorker; readonly atMs: number }
  | { readonly kind: 'liar'; readonly worker: SimWorker; readonly lie: Lie }
  | { readonly kind: 'refuses'; readonly worker: SimWorker; readonly roundsMost: number }
  | { readonly kind: 'full ledger'; readonly worker: SimWorker; readonly atMs: number }
  | { readonly kind: 'cancelled'; readonly run: string; readonly atMs: number };

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

const SITE_SETS = [SITES, SITES.slice(0, 3), SITES.slice(2)];
const LASTING_KINDS = ['gone', 'liar', 'refuses', 'full ledger', 'cancelled'] as const;
/** Longer than all faults of a seed together. */
const PATIENT_MINUTES = 60;
const IMPATIENT_MINUTES = 3;

/** Plays everything that follows from the seed, and compares every run with the same run undisturbed. */
export async function playSeed(seed: number): Promise<SeedReport> {
  const random = seededRandom(seed);
  const lastingKind = random.uniform() < 0.25 ? one(random, LASTING_KINDS) : null;
  const faultySite = one(random, SITES);
  const plan = planOf(seed, random, lastingKind === 'gone' || lastingKind === 'liar' ? faultySite : null);
  const expected = await Promise.all(plan.runs.map((run) => undisturbed(plan, run)));
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
  const standstillMs =
    120_000 + asks * slowAskMs + (lasting === null ? 0 : IMPATIENT_MINUTES * 60_000 * plan.runs.length);
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
    outcomes.push(await judge(cluster, stored, expected[index], lasting));
  if (cluster.stored.length < plan.runs.length) cluster.violated('a run was never submitted');
  return report(outcomes);
}

function planOf(seed: number, random: Random, impatientAbout: string | null): ClusterPlan {
  const runs = Array.from({ length: random.uniform() < 0.4 ? 2 : 1 }, (_, index): RunPlan => {
    const sites = one(random, SITE_SETS);
    const impatient = impatientAbout !== null && sites.includes(impatientAbout);
    return {
      model: one(random, MODELS),
      sites,
      patienceMinutes: impatient ? IMPATIENT_MINUTES : PATIENT_MINUTES,
      submitAtMs: index === 0 ? 0 : 3000 * random.uniform(),
    };
  });
  return {
    seed,
    distance: one(random, ['even', 'near', 'far', 'wild'] as const),
    policy: one(random, POLICIES),
    sharded: random.uniform() < 0.25,
    runningMost: one(random, [1, 8]),
    workerMemoryNumbers: one(random, [0, 12, 1_000_000]),
    runs,
  };
}

function lastingOf(kind: Lasting['kind'], site: string, cluster: Cluster, random: Random): Lasting {
  const atMs = 5000 * random.uniform();
  if (kind === 'cancelled') {
    const run = 'r1';
    cluster.after(atMs, () => cluster.coordinator?.cancel(run));
    return { kind, run, atMs };
  }
  const worker = cluster.workers.find(({ name }) => name.startsWith(site));
  if (worker === undefined) throw new Error(`no worker at ${site}`);
  switch (kind) {
    case 'gone':
      cluster.after(atMs, () => {
        cluster.gone.add(worker.name);
        worker.kill();
      });
      return { kind, worker, atMs };
    case 'liar':
      worker.liesAlways = one(random, LIES);
      return { kind, worker, lie: worker.liesAlways };
    case 'full ledger':
      cluster.after(atMs, () => cluster.fullLedgers.add(worker.name));
      return { kind, worker, atMs };
    case 'refuses': {
      const roundsMost = 1 + random.integer(8);
      worker.policy = { ...worker.policy, roundsMost };
      return { kind, worker, roundsMost };
    }
  }
}

function asFault(lasting: Lasting | null): Injected[] {
  if (lasting === null) return [];
  const atMs = 'atMs' in lasting ? lasting.atMs : 0;
  const about = lasting.kind === 'cancelled' ? lasting.run : lasting.worker.name;
  const more =
    lasting.kind === 'liar' ? ` ${lasting.lie}` : lasting.kind === 'refuses' ? ` ${lasting.roundsMost}` : '';
  return [{ atMs, kind: `for good: ${lasting.kind}`, about: `${about}${more}` }];
}

/** Compares an ended run with the same run undisturbed, as far as the lasting fault allows. */
async function judge(
  cluster: Cluster,
  stored: StoredRun,
  expected: Ending,
  lasting: Lasting | null,
): Promise<string> {
  if (stored.log.at(-1)?.event !== 'outcome') {
    cluster.violated(
      `${stored.run} has not ended although nothing is wrong since ${Math.round(cluster.quietAtMs)} ms`,
    );
    return 'open';
  }
  const ending = await checkRun(cluster, stored);
  if (ending === null) return 'inconsistent';
  const { outcome, reason } = ending.result;
  const touched = lasting !== null && isAbout(lasting, stored);
  const same = ending.text === expected.text;
  const sameAnswers = ending.answers === expected.answers || lasting?.kind === 'refuses';
  if (same && sameAnswers) return outcome;
  if (same) cluster.violated(`${stored.run} has the same result from other answers`);
  else if (!touched || !allowed(lasting, outcome, reason))
    cluster.violated(`${stored.run} ended otherwise than undisturbed: ${outcome}, ${reason}`);
  return outcome;
}

const isAbout = (lasting: Lasting, { run, model }: StoredRun): boolean => {
  if (lasting.kind === 'cancelled') return lasting.run === run;
  const { sites } = model.specification;
  return Array.isArray(sites) && sites.some((site) => lasting.worker.name.startsWith(site));
};

/** A run that cannot be done says so, and who it is about. */
function allowed(lasting: Lasting, outcome: string, reason: string | null): boolean {
  if (lasting.kind === 'cancelled') return outcome === 'cancelled';
  const named = reason?.includes(lasting.worker.name) ?? false;
  const refuses = lasting.kind === 'refuses' || lasting.kind === 'full ledger';
  return named && outcome === (refuses ? 'refused' : 'site-missing');
}
