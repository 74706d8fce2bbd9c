import type { Random } from '../../numerics/random.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import type { Link } from '../../protocol/link/link.js';
import { memoryLinks } from '../../protocol/link/memory.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import type { CoordinatorLink } from '../../worker/service/connection.js';
import type { VirtualTime } from '../support/virtual-time.js';
import type { SimProcess } from './sim-process.js';

type Message = ToWorker | ToCoordinator;

/** Time of travel of one message: always the same, as in one building, across a country, or anything. */
export type Distance = 'even' | 'near' | 'far' | 'wild';

/** What befalls the road to one member; times are virtual milliseconds until which it lasts. */
export interface Road {
  slowUntilMs: number;
  cutUntilMs: number;
  repeatUntilMs: number;
  /** The send buffers of both ends are full. */
  chokedUntilMs: number;
}

/** All links between workers and the coordinator, with delays drawn from the seed. */
export class Network {
  private readonly roads = new Map<string, Road>();
  private readonly connections = new Set<Connection>();

  constructor(
    readonly time: VirtualTime,
    readonly random: Random,
    private readonly distance: Distance,
    /** Nothing that is under way now lasts longer than until then. */
    readonly lasts: (untilMs: number) => void,
  ) {}

  road(member: string): Road {
    const road = this.roads.get(member) ?? {
      slowUntilMs: 0,
      cutUntilMs: 0,
      repeatUntilMs: 0,
      chokedUntilMs: 0,
    };
    this.roads.set(member, road);
    return road;
  }

  delayMs(member: string): number {
    const slow = this.road(member).slowUntilMs > this.time.steadyMs() ? 30 : 1;
    return slow * this.travelMs();
  }

  /** The longest that one message takes on a road that is not slowed. */
  get travelMostMs(): number {
    return { even: 10, near: 5, far: 200, wild: 4000 }[this.distance];
  }

  /** About how long one ask of everyone takes, there and back. */
  get askMs(): number {
    return { even: 25, near: 35, far: 350, wild: 3000 }[this.distance];
  }

  /** A worker's try to reach the coordinator, which is null while it is down. */
  async connect(
    member: string,
    worker: SimProcess,
    accepts: () => { process: SimProcess; take: (link: Link<ToWorker, ToCoordinator>) => void } | null,
    alter: (send: (message: ToCoordinator) => boolean) => (message: ToCoordinator) => boolean,
  ): Promise<Checked<CoordinatorLink>> {
    await worker.sleep(this.delayMs(member));
    const coordinator = accepts();
    if (coordinator === null || this.road(member).cutUntilMs > this.time.steadyMs()) {
      await worker.sleep(this.random.uniform() * 2000);
      return fail('link-lost', 'The coordinator cannot be reached.');
    }
    const connection = new Connection(this, member, coordinator.process, worker, alter);
    this.connections.add(connection);
    coordinator.take(connection.coordinatorEnd);
    return succeed(connection.workerEnd);
  }

  /** Breaks every connection that `broken` names, as a crash or a cable would. */
  sever(broken: (connection: Connection) => boolean): number {
    const hit = [...this.connections].filter(broken);
    for (const connection of hit) {
      this.connections.delete(connection);
      connection.sever();
    }
    return hit.length;
  }

  /** When an end finds out that its peer is gone: mostly soon, at times only by the peer's silence. */
  noticeMs(): number {
    const { random } = this;
    const ms = random.uniform() < 0.85 ? 400 * random.uniform() : LIMITS.silenceMostMs * random.uniform();
    this.lasts(this.time.steadyMs() + ms);
    return ms;
  }

  private travelMs(): number {
    const u = this.random.uniform();
    switch (this.distance) {
      case 'even':
        return 10;
      case 'near':
        return 1 + 4 * u;
      case 'far':
        return 20 + 180 * u;
      case 'wild':
        return 4000 * u ** 6;
    }
  }
}

export class Connection {
  severed = false;
  readonly coordinatorEnd: SimEnd<ToWorker, ToCoordinator>;
  readonly workerEnd: SimEnd<ToCoordinator, ToWorker>;

  constructor(
    readonly network: Network,
    readonly member: string,
    readonly coordinator: SimProcess,
    readonly worker: SimProcess,
    alter: (send: (message: ToCoordinator) => boolean) => (message: ToCoordinator) => boolean,
  ) {
    const ends = memoryLinks((run) => this.deliver(run));
    this.coordinatorEnd = new SimEnd(this, coordinator, ends.coordinator, (send) => send);
    this.workerEnd = new SimEnd(this, worker, ends.worker, alter);
  }

  /** What is in flight is lost; each end finds out by itself. */
  sever(): void {
    this.severed = true;
    for (const end of [this.coordinatorEnd, this.workerEnd]) {
      this.network.time.after(this.network.noticeMs(), () =>
        end.tell(CLOSE_CODES.connectionLost, 'connection lost'),
      );
    }
  }

  private deliver(run: () => void): void {
    const { time } = this.network;
    const arrive = (): void => {
      if (this.severed) return;
      const cutMs = this.network.road(this.member).cutUntilMs - time.steadyMs();
      if (cutMs > 0) time.after(cutMs + this.network.delayMs(this.member), arrive);
      else run();
    };
    time.after(this.network.delayMs(this.member), arrive);
  }
}

/** One end as its process sees it: silent once the process is dead, blind to a broken connection until it is told. */
class SimEnd<Outgoing extends Message, Incoming extends Message> implements Link<Outgoing, Incoming> {
  private told = false;
  private closeHandler: ((code: number, reason: string) => void) | null = null;
  private readonly sendAltered: (message: Outgoing) => boolean;

  constructor(
    private readonly connection: Connection,
    private readonly owner: SimProcess,
    private readonly inner: Link<Outgoing, Incoming>,
    alter: (send: (message: Outgoing) => boolean) => (message: Outgoing) => boolean,
  ) {
    inner.onClose((code, reason) => this.tell(code, reason));
    this.sendAltered = alter((message) => this.sendPlain(message));
  }

  get open(): boolean {
    return this.inner.open && !this.told;
  }

  get bytesSent(): number {
    return this.inner.bytesSent;
  }

  get bytesReceived(): number {
    return this.inner.bytesReceived;
  }

  get bytesWaiting(): number {
    return this.inner.bytesWaiting;
  }

  send(message: Outgoing): boolean {
    return this.sendAltered(message);
  }

  onMessage(handler: (message: Incoming) => void): void {
    const take = (message: Incoming): void => {
      if (this.owner.alive && !this.connection.severed && this.open) handler(message);
    };
    this.inner.onMessage((message) => {
      take(message);
      const { network, member } = this.connection;
      const repeatable = message.kind === 'answer' || message.kind === 'refusal' || message.kind === 'ask';
      if (repeatable && network.road(member).repeatUntilMs > network.time.steadyMs())
        network.time.after(4 * network.delayMs(member), () => take(message));
    });
  }

  onClose(handler: (code: number, reason: string) => void): void {
    this.closeHandler = handler;
  }

  close(code: number, reason: string): void {
    if (!this.owner.alive) return;
    if (this.connection.severed) this.connection.network.time.after(0, () => this.tell(code, reason));
    this.inner.close(code, reason);
  }

  tell(code: number, reason: string): void {
    if (this.told) return;
    this.told = true;
    if (this.owner.alive) this.closeHandler?.(code, reason);
  }

  private sendPlain(message: Outgoing): boolean {
    if (!this.owner.alive || !this.open) return false;
    const { network, member, severed } = this.connection;
    if (network.road(member).chokedUntilMs > network.time.steadyMs()) return false;
    return severed || this.inner.send(message);
  }
}
