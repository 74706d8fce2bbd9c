import { createHash } from 'node:crypto';
import type { Random } from '../../numerics/random.js';
import { encodeMessage } from '../../protocol/codec.js';
import { succeed } from '../../protocol/failure.js';
import type { Answer } from '../../protocol/messages/round.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import { PROTOCOL_VERSION, SOFTWARE } from '../../protocol/version.js';
import { Ledger } from '../../worker/custody/ledger.js';
import type { Policy } from '../../worker/custody/site-file.js';
import { type Answerer, createAnswerer } from '../../worker/service/answerer.js';
import { keepConnected } from '../../worker/service/connection.js';
import type { Cluster } from './cluster.js';
import { type Lie, told } from './lies.js';
import { tableOf } from './models.js';
import { ledgerFileOn, SimFile } from './sim-file.js';
import type { SimProcess } from './sim-process.js';

export interface SimMember {
  readonly site: string;
  readonly shard: { readonly index: number; readonly of: number };
}

export const nameOf = ({ site, shard }: SimMember): string =>
  shard.of === 1 ? site : `${site}#${shard.index}`;

/** A worker on one member's machine: its ledger outlives its processes, everything else dies with them. */
export class SimWorker {
  readonly name: string;
  readonly site: string;
  readonly ledger = new SimFile();
  process: SimProcess | null = null;
  hangUntilMs = 0;
  /** What it makes of its next answers, instead of sending them as they are. */
  lies: Lie[] = [];
  /** Lies in every answer for ever. */
  liesAlways: Lie | null = null;
  private stop = new AbortController();
  /** Digests of the answers that it made, by run and ask. */
  private readonly made = new Map<string, string>();

  constructor(
    private readonly cluster: Cluster,
    private readonly member: SimMember,
    public policy: Policy,
    private readonly random: Random,
  ) {
    this.name = nameOf(member);
    this.site = member.site;
  }

  /** Runs until it is killed or leaves in good order, then comes back. Nothing here tells it to go for good. */
  async start(): Promise<void> {
    const { cluster } = this;
    const self = cluster.newProcess();
    const stop = new AbortController();
    this.process = self;
    this.stop = stop;
    const file = ledgerFileOn(
      this.ledger,
      self,
      cluster.weatherOf(this.name, () => cluster.crashWorker(this)),
    );
    const opened = await Ledger.open(file, () => new Date(self.wallMs()));
    if (!opened.ok)
      return cluster.violated(`${this.name}: its ledger does not open: ${opened.failure.message}`);
    const failure = await keepConnected({
      url: 'simulated',
      hello: {
        kind: 'hello',
        version: PROTOCOL_VERSION,
        ...this.member,
        software: SOFTWARE,
        kernel: 'simulated',
      },
      connect: () =>
        cluster.network.connect(
          this.name,
          self,
          () => cluster.coordinatorDoor(this.member.site),
          (send) => (message) => this.sendOrLie(send, message),
        ),
      answerer: this.answerer(self, opened.value.ledger),
      timers: self,
      random: () => this.random.uniform(),
      onEvent: () => {},
      stop: stop.signal,
      graceMs: 10_000,
      once: false,
    });
    if (failure !== null)
      cluster.violated(`${this.name} left for good: ${failure.message} [${failure.code}]`);
    self.alive = false;
    cluster.network.sever(({ worker }) => worker === self);
    cluster.restartLater(this);
  }

  /** Leaves in good order, as at a signal. */
  leave(): void {
    this.stop.abort();
  }

  kill(): void {
    const { process } = this;
    if (process === null) return;
    process.alive = false;
    this.cluster.network.sever(({ worker }) => worker === process);
  }

  private answerer(self: SimProcess, ledger: Ledger): Answerer {
    return createAnswerer({
      ...this.member,
      policy: this.policy,
      approved: async () => succeed(new Set()),
      readTable: async ({ shard }) => {
        await self.sleep(50 * this.random.uniform());
        return succeed(tableOf(this.member.site, shard));
      },
      ledger,
      nowMs: () => self.steadyMs(),
      onEvent: (event) => {
        if (event.event === 'refused' && event.failure.code === 'internal')
          this.cluster.violated(`${this.name} met a defect: ${event.failure.message}`);
      },
      pause: () =>
        self.sleep(
          this.cluster.computeMs(this.site) + Math.max(0, this.hangUntilMs - this.cluster.time.steadyMs()),
        ),
      bounds: { memoryNumbersMost: this.cluster.workerMemoryNumbers },
    });
  }

  private sendOrLie(send: (message: ToCoordinator) => boolean, message: ToCoordinator): boolean {
    if (message.kind !== 'answer') return send(message);
    this.checkRepeat(message);
    const lie = this.liesAlways ?? this.lies.shift();
    if (lie === undefined) return send(message);
    return told(lie, message, this.random).every(send);
  }

  /** An answer depends on the ask's content alone, whatever happened between two times it was asked. */
  private checkRepeat(answer: Answer): void {
    const key = `${answer.run} ${answer.ask}`;
    const digest = createHash('sha256').update(encodeMessage(answer)).digest('hex');
    const before = this.made.get(key);
    if (before !== undefined && before !== digest)
      this.cluster.violated(`${this.name} answered ask ${answer.ask} of ${answer.run} in two ways`);
    this.made.set(key, digest);
  }
}
