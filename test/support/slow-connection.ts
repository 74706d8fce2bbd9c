import { connect, type Socket } from 'node:net';
import type { Breaking, Direction, SlowLink } from './slow-link.js';

/** Bytes under way in one direction of one connection; while they are, nothing more is read from the sender. */
const UNDER_WAY_MOST = 1024 * 1024;
/** One connection of the worker and the one to the coordinator that goes with it. */
export class SlowConnection {
  readonly #link: SlowLink;
  readonly #worker: Socket;
  readonly #coordinator: Socket;
  readonly #ways: readonly Way[];
  silent = false;
  #gone: () => void = () => undefined;

  constructor(link: SlowLink, worker: Socket) {
    this.#link = link;
    this.#worker = worker;
    this.#coordinator = connect({ port: link.targetPort, host: '127.0.0.1', allowHalfOpen: true });
    const readyMs = performance.now() + 2 * link.line.oneWayMs;
    this.#ways = [
      new Way(link, this, 'up', worker, this.#coordinator, readyMs),
      new Way(link, this, 'down', this.#coordinator, worker, readyMs),
    ];
    for (const socket of [worker, this.#coordinator]) {
      socket.setNoDelay(true);
      // what an error means for the other end is told by the end of the way that it was on
      socket.on('error', () => undefined);
      socket.on('close', () => {
        if (worker.destroyed && this.#coordinator.destroyed) this.#gone();
      });
    }
    this.look();
  }

  onGone(handler: () => void): void {
    this.#gone = handler;
  }

  get held(): boolean {
    return this.silent || this.#link.partitioned;
  }

  silence(): void {
    this.silent = true;
    this.look();
  }

  /** Goes on or stands still, as the line is now. */
  look(): void {
    for (const way of this.#ways) way.look();
  }

  break(breaking: Breaking): void {
    for (const way of this.#ways) way.drop();
    for (const socket of [this.#worker, this.#coordinator]) {
      if (breaking === 'reset') socket.resetAndDestroy();
      else socket.end(() => socket.destroy());
    }
  }

  destroy(): void {
    for (const way of this.#ways) way.drop();
    this.#worker.destroy();
    this.#coordinator.destroy();
  }
}

type Parcel =
  | { readonly bytes: Buffer; readonly arrivesMs: number }
  | { readonly last: 'end' | 'reset' | (() => void); readonly arrivesMs: number };

/** One direction of one connection: parcels under way, in order. */
class Way {
  readonly #parcels: Parcel[] = [];
  #underWay = 0;
  #lineFreeMs: number;
  #arrivesLastMs = 0;
  #timer: NodeJS.Timeout | null = null;
  #full = false;
  #over = false;

  constructor(
    private readonly link: SlowLink,
    private readonly connection: SlowConnection,
    private readonly direction: Direction,
    private readonly from: Socket,
    private readonly to: Socket,
    readyMs: number,
  ) {
    this.#lineFreeMs = readyMs;
    from.on('data', (piece: Buffer) => this.#take(piece));
    from.on('end', () => this.#finish('end'));
    from.on('close', (broken) => {
      if (broken) this.#finish('reset');
    });
    to.on('drain', () => {
      this.#full = false;
      this.#deliver();
    });
  }

  look(): void {
    if (this.connection.held || this.#underWay >= UNDER_WAY_MOST) this.from.pause();
    else this.from.resume();
    this.#deliver();
  }

  /** Forgets what is under way and carries nothing more. */
  drop(): void {
    this.#over = true;
    this.#parcels.length = 0;
    if (this.#timer !== null) clearTimeout(this.#timer);
  }

  #take(piece: Buffer): void {
    if (this.#over) return;
    const cut = this.link.takeCut(this.direction, piece.length);
    if (cut === null) {
      this.#send(piece);
      return;
    }
    this.#send(piece.subarray(0, piece.length - cut.missingBytes));
    this.#finish(() => {
      this.connection.break(cut.breaking);
      cut.done();
    });
  }

  #send(piece: Buffer): void {
    const { bytesPerSecond, segmentBytes } = this.link.line;
    for (let at = 0; at < piece.length; at += segmentBytes) {
      const bytes = piece.subarray(at, at + segmentBytes);
      this.#lineFreeMs =
        Math.max(performance.now(), this.#lineFreeMs) + (1000 * bytes.length) / bytesPerSecond;
      this.#arrivesLastMs = Math.max(this.#arrivesLastMs, this.link.arrivesMs(this.#lineFreeMs));
      this.#parcels.push({ bytes, arrivesMs: this.#arrivesLastMs });
    }
    this.#underWay += piece.length;
    this.link.underWayMost = Math.max(this.link.underWayMost, this.#underWay);
    this.look();
  }

  #finish(last: 'end' | 'reset' | (() => void)): void {
    if (this.#over) return;
    this.#arrivesLastMs = Math.max(this.#arrivesLastMs, performance.now() + this.link.line.oneWayMs);
    this.#parcels.push({ last, arrivesMs: this.#arrivesLastMs });
    this.#deliver();
  }

  #deliver(): void {
    if (this.#timer !== null) clearTimeout(this.#timer);
    this.#timer = null;
    while (!this.#full && !this.connection.held) {
      const [parcel] = this.#parcels;
      if (parcel === undefined) return;
      const waitMs = parcel.arrivesMs - performance.now();
      if (waitMs > 0) {
        this.#timer = setTimeout(() => this.#deliver(), Math.ceil(waitMs));
        return;
      }
      this.#parcels.shift();
      if ('last' in parcel) {
        this.#end(parcel.last);
        return;
      }
      this.#underWay -= parcel.bytes.length;
      this.#full = !this.to.write(parcel.bytes);
      if (this.#underWay < UNDER_WAY_MOST) this.from.resume();
    }
  }

  #end(last: 'end' | 'reset' | (() => void)): void {
    if (typeof last === 'function') last();
    else if (last === 'reset') this.to.resetAndDestroy();
    else this.to.end();
  }
}
