import type { LogEvent } from '../../coordinator/run/log-event.js';
import { type Random, seededRandom } from '../../numerics/random.js';
import type { Link } from '../../protocol/link/link.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { VirtualTime } from '../support/virtual-time.js';
import { logFault } from './invariants.js';
import { type ModelName, modelOf, type PolicyName, policyOf, SITES } from './models.js';
import { type Distance, Network } from './network.js';
import { SimCoordinator, type StoredRun } from './sim-coordinator.js';
import { type AppendPhase, type DiskWeather, SimFile } from './sim-file.js';
import { SimProcess } from './sim-process.js';
import { type SimMember, SimWorker } from './sim-worker.js';

export interface RunPlan {
  readonly model: ModelName;
  readonly sites: readonly string[];
  /** In place of the names, how many sites at least; null: the sites are named. */
  readonly least: number | null;
  /** Sites whose replies end a round, and how old an answer that stands in may be; null: all sites. */
  readonly quorum: { readonly sites: number; readonly oldest: number } | null;
  readonly missing: 'stop' | 'go-without';
  readonly patienceMinutes: number;
  readonly submitAtMs: number;
}

export interface ClusterPlan {
  readonly seed: number;
  readonly distance: Distance;
  readonly policy: PolicyName;
  /** The first site splits its rows over two workers. */
  readonly sharded: boolean;
  readonly runningMost: number;
  /** Numbers a worker remembers; few make it ask for vectors again. */
  readonly workerMemoryNumbers: number;
  /** A site that computes longer than the others. */
  readonly slowSite: string | null;
  /** A site whose workers start later than the others'. */
  readonly joinsLate: { readonly site: string; readonly afterMs: number } | null;
  readonly runs: readonly RunPlan[];
}

/** How many times longer the slow site computes. */
const SLOWER = 50;

/**
 * Coordinator, workers, links and disks in one process on virtual time. Everything that happens follows from the
 * plan's seed; faults come from outside (`faults.ts`).
 */
export class Cluster {
  readonly time = new VirtualTime();
  readonly network: Network;
  readonly workers: readonly SimWorker[];
  readonly stored: StoredRun[] = [];
  readonly violations: string[] = [];
  readonly notices = new Map<string, number>();
  coordinator: SimCoordinator | null = null;
  /** When the last fault so far is over; whatever happens later is the cluster's own doing. */
  quietAtMs = 0;
  slowDiskUntilMs = 0;
  fullDiskUntilMs = 0;
  /** Processes to be killed in their next append. */
  readonly armed = new Map<string, AppendPhase>();
  /** Workers whose ledger cannot be written. */
  readonly fullLedgers = new Set<string>();
  /** Workers that do not come back. */
  readonly gone = new Set<string>();
  readonly random: Random;

  constructor(private readonly plan: ClusterPlan) {
    this.random = seededRandom(plan.seed);
    const streams = Array.from({ length: 2 }, () => seededRandom(this.random.integer(2 ** 48)));
    this.network = new Network(this.time, streams[0], plan.distance, (untilMs) => this.lasts(untilMs));
    this.workers = membersOf(plan).map(
      (member) => new SimWorker(this, member, policyOf(plan.policy), streams[1]),
    );
  }

  get runningMost(): number {
    return this.plan.runningMost;
  }

  get workerMemoryNumbers(): number {
    return this.plan.workerMemoryNumbers;
  }

  get nowMs(): number {
    return this.time.steadyMs();
  }

  /** Starts every process and lets time pass until every run has ended, or stands still for `standstillMs`. */
  async play(standstillMs: number): Promise<void> {
    this.startCoordinator();
    for (const worker of this.workers)
      this.after(this.network.delayMs(worker.name) + this.lateBy(worker), () => this.startWorker(worker));
    this.plan.runs.forEach((run, index) => {
      this.after(run.submitAtMs, () => this.submit(`r${index + 1}`, run));
    });
    const over = (): boolean => this.ended || this.nowMs > this.quietAtMs + standstillMs;
    await this.time.pass(Number.MAX_SAFE_INTEGER, over);
    for (const { process } of [this.coordinator, ...this.workers].filter((one) => one !== null))
      if (process !== null) process.alive = false;
  }

  get ended(): boolean {
    return (
      this.stored.length === this.plan.runs.length &&
      this.stored.every(({ log }) => log.at(-1)?.event === 'outcome')
    );
  }

  lasts(untilMs: number): void {
    this.quietAtMs = Math.max(this.quietAtMs, untilMs);
  }

  violated(what: string): void {
    this.violations.push(`at ${Math.round(this.nowMs)} ms: ${what}`);
  }

  noticed(code: string): void {
    this.notices.set(code, (this.notices.get(code) ?? 0) + 1);
  }

  newProcess(): SimProcess {
    return new SimProcess(this.time, this.random.integer(7_200_000) - 3_600_000);
  }

  /** Milliseconds a worker computes at one problem. */
  computeMs(site: string): number {
    const slower = site === this.plan.slowSite ? SLOWER : 1;
    return slower * (this.plan.distance === 'even' ? 1 : 30 * this.random.uniform() ** 3);
  }

  weatherOf(name: string, crash: () => void): DiskWeather {
    return {
      delayMs: () => this.random.uniform() * (this.slowDiskUntilMs > this.nowMs ? 1500 : 2),
      full: () => (name === 'coordinator' ? this.fullDiskUntilMs > this.nowMs : this.fullLedgers.has(name)),
      cut: (length) => this.random.integer(length + 1),
      reached: (phase) => {
        if (this.armed.get(name) !== phase) return;
        this.armed.delete(name);
        this.after(0, crash);
      },
    };
  }

  /** Where workers reach the coordinator; null while it is down. */
  coordinatorDoor(
    site: string,
  ): { process: SimProcess; take: (link: Link<ToWorker, ToCoordinator>) => void } | null {
    const { coordinator } = this;
    if (coordinator === null || !coordinator.process.alive) return null;
    return { process: coordinator.process, take: (link) => coordinator.door.add(link, site) };
  }

  crashCoordinator(): void {
    const { coordinator } = this;
    if (coordinator === null) return;
    coordinator.process.alive = false;
    this.network.sever((connection) => connection.coordinator === coordinator.process);
    this.coordinator = null;
    for (const stored of this.stored) loseTail(stored, this.random);
    this.after(this.pauseMs(), () => this.startCoordinator());
  }

  /** The coordinator leaves in good order and comes back. */
  stopCoordinator(): void {
    const { coordinator } = this;
    if (coordinator === null) return;
    coordinator.stop().then(
      () => {
        if (this.coordinator !== coordinator) return;
        this.lasts(this.nowMs);
        this.crashCoordinator();
      },
      (error) => this.violated(`the coordinator does not stop: ${String(error)}`),
    );
  }

  crashWorker(worker: SimWorker): void {
    worker.kill();
    this.restartLater(worker);
  }

  restartLater(worker: SimWorker): void {
    this.after(this.pauseMs(), () => this.startWorker(worker));
  }

  /** An operator sees that a run cannot go on, makes room on the disk and starts the coordinator again. */
  halted(run: string): void {
    if (this.fullDiskUntilMs === 0) this.violated(`${run} halted although the disk was never full`);
    const { coordinator } = this;
    const waitMs = Math.max(0, this.fullDiskUntilMs - this.nowMs) + 1000;
    this.lasts(this.nowMs + waitMs);
    this.after(waitMs, () => {
      if (this.coordinator === coordinator) this.crashCoordinator();
    });
  }

  /** Checked at every line: the round log tells every round once and in order, and an outcome only once it is kept. */
  checkLog(stored: StoredRun, event: LogEvent): void {
    const fault = logFault(stored, event);
    if (fault !== null) this.violated(`${stored.run}: ${fault}`);
  }

  after(delayMs: number, call: () => void): void {
    this.time.after(delayMs, call);
  }

  private pauseMs(): number {
    const ms = 20 + 15_000 * this.random.uniform() ** 2;
    this.lasts(this.nowMs + ms);
    return ms;
  }

  private startCoordinator(): void {
    if (this.coordinator !== null) return;
    this.coordinator = new SimCoordinator(this, this.newProcess());
    for (const stored of this.stored) this.coordinator.open(stored);
  }

  private startWorker(worker: SimWorker): void {
    if (worker.process?.alive || this.gone.has(worker.name)) return;
    worker.start().catch((error) => this.violated(`${worker.name} failed: ${String(error)}`));
  }

  private lateBy({ site }: SimWorker): number {
    const { joinsLate } = this.plan;
    if (joinsLate?.site !== site) return 0;
    this.lasts(joinsLate.afterMs);
    return joinsLate.afterMs;
  }

  private submit(run: string, plan: RunPlan): void {
    const stored: StoredRun = {
      run,
      model: modelOf(plan),
      journal: new SimFile(),
      log: [],
      result: null,
    };
    this.stored.push(stored);
    this.coordinator?.open(stored);
  }
}

function membersOf({ sharded }: ClusterPlan): SimMember[] {
  return SITES.flatMap((site, index): SimMember[] =>
    sharded && index === 0
      ? [1, 2].map((part) => ({ site, shard: { index: part, of: 2 } }))
      : [{ site, shard: { index: 1, of: 1 } }],
  );
}

/** Lines of the round log that the disk had not taken yet; the outcome's line is there before it is told. */
function loseTail(stored: StoredRun, random: Random): void {
  if (stored.log.some(({ event }) => event === 'outcome') || random.uniform() < 0.7) return;
  stored.log = stored.log.slice(0, random.integer(stored.log.length + 1));
}
