import { type Random, seededRandom } from '../../numerics/random.js';
import type { Cluster } from './cluster.js';
import { LIES, type Lie } from './lies.js';
import { APPEND_PHASES } from './sim-file.js';
import type { SimWorker } from './sim-worker.js';

/** One fault as it was injected. */
export interface Injected {
  readonly atMs: number;
  readonly kind: string;
  readonly about: string;
}

type Inject = (cluster: Cluster, random: Random) => string;

/** A span of virtual time from `least` to `most` milliseconds, short ones oftener; the fault is over after it. */
function span(cluster: Cluster, random: Random, least: number, most: number): number {
  const untilMs = cluster.nowMs + least + (most - least) * random.uniform() ** 2;
  cluster.lasts(untilMs);
  return untilMs;
}

export const one = <T>(random: Random, list: readonly T[]): T => list[random.integer(list.length)];

const onWorker =
  (fault: (worker: SimWorker, cluster: Cluster, random: Random) => string): Inject =>
  (cluster, random) => {
    const worker = one(random, cluster.workers);
    return `${worker.name} ${fault(worker, cluster, random)}`.trim();
  };

const onRoad = (
  field: 'slowUntilMs' | 'cutUntilMs' | 'repeatUntilMs' | 'chokedUntilMs',
  most: number,
): Inject =>
  onWorker(({ name }, cluster, random) => {
    const untilMs = span(cluster, random, 50, most);
    cluster.network.road(name)[field] = untilMs;
    return `until ${Math.round(untilMs)}`;
  });

const lie = (told: Lie): Inject =>
  onWorker((worker) => {
    worker.lies.push(told);
    return '';
  });

/** Every fault here heals by itself. */
export const FAULTS: Readonly<Record<string, Inject>> = {
  'slow road': onRoad('slowUntilMs', 20_000),
  'repeated messages': onRoad('repeatUntilMs', 20_000),
  'full buffers': onRoad('chokedUntilMs', 15_000),
  partition: (cluster, random) => {
    const untilMs = span(cluster, random, 200, 60_000);
    const cut = cluster.workers.filter(() => random.uniform() < 0.5);
    for (const { name } of cut) {
      cluster.network.road(name).cutUntilMs = untilMs;
      if (random.uniform() < 0.5) cluster.network.sever(({ member }) => member === name);
    }
    return `${cut.map(({ name }) => name).join(' ')} until ${Math.round(untilMs)}`;
  },
  'lost link': onWorker(({ name }, cluster) => {
    return cluster.network.sever(({ member }) => member === name) > 0 ? '' : 'had none';
  }),
  'worker killed': onWorker((worker, cluster) => {
    cluster.crashWorker(worker);
    return '';
  }),
  'worker killed in its ledger': onWorker((worker, cluster, random) => {
    const phase = one(random, APPEND_PHASES);
    cluster.armed.set(worker.name, phase);
    return phase;
  }),
  'worker stopped': onWorker((worker) => {
    worker.leave();
    return '';
  }),
  'worker hangs': onWorker((worker, cluster, random) => {
    worker.hangUntilMs = span(cluster, random, 100, 90_000);
    return `until ${Math.round(worker.hangUntilMs)}`;
  }),
  'coordinator killed': (cluster) => {
    cluster.crashCoordinator();
    return '';
  },
  'coordinator killed in its journal': (cluster, random) => {
    const phase = one(random, APPEND_PHASES);
    cluster.armed.set('coordinator', phase);
    return phase;
  },
  'coordinator stopped': (cluster) => {
    cluster.stopCoordinator();
    return '';
  },
  'slow disk': (cluster, random) => {
    cluster.slowDiskUntilMs = span(cluster, random, 100, 20_000);
    return `until ${Math.round(cluster.slowDiskUntilMs)}`;
  },
  'full disk': (cluster, random) => {
    cluster.fullDiskUntilMs = span(cluster, random, 100, 20_000);
    return `until ${Math.round(cluster.fullDiskUntilMs)}`;
  },
  ...Object.fromEntries(LIES.map((told) => [`answer: ${told}`, lie(told)])),
};

/** Injects faults one after the other, at random times, until `count` are spent or every run has ended. */
export class FaultSchedule {
  readonly injected: Injected[] = [];
  private readonly random: Random;
  private readonly kinds: readonly string[];

  /** `meanGapMs`: mean time between two faults. Only some kinds occur in one seed, so that each meets its like. */
  constructor(
    private readonly cluster: Cluster,
    seed: number,
    private readonly count: number,
    private readonly meanGapMs: number,
  ) {
    this.random = seededRandom(seed);
    const all = Object.keys(FAULTS);
    const share = 0.15 + 0.85 * this.random.uniform();
    const some = all.filter(() => this.random.uniform() < share);
    this.kinds = some.length > 0 ? some : all;
    this.next();
  }

  private next(): void {
    if (this.injected.length >= this.count) return;
    const gapMs = -this.meanGapMs * Math.log(1 - this.random.uniform());
    this.cluster.lasts(this.cluster.nowMs + gapMs);
    this.cluster.after(gapMs, () => {
      if (this.cluster.ended) return;
      const kind = one(this.random, this.kinds);
      const atMs = this.cluster.nowMs;
      this.injected.push({ atMs, kind, about: FAULTS[kind](this.cluster, this.random) });
      this.next();
    });
  }
}
