import { type AddressInfo, createServer, type Server } from 'node:net';
import { type Random, seededRandom } from '../../numerics/random.js';
import { SlowConnection } from './slow-connection.js';

/** What a line does to the bytes that it carries, the same each way. */
export interface Line {
  /** Time from one end to the other: half a round trip. Milliseconds. */
  readonly oneWayMs: number;
  /** Bytes per second and direction of one connection. */
  readonly bytesPerSecond: number;
  /** Payload of a segment; a segment comes whole. */
  readonly segmentBytes: number;
  /** Share of segments that are lost once sent, from 0 to less than 1. */
  readonly lossShare: number;
}

/** `up`: from the worker to the coordinator. */
export type Direction = 'up' | 'down';

/** A connection is broken off with the end of one way (FIN) or with a reset (RST). RFC 9293, section 3.10. */
export type Breaking = 'end' | 'reset';

const PERFECT: Line = {
  oneWayMs: 0,
  bytesPerSecond: Number.POSITIVE_INFINITY,
  // of TCP on a path of 1500 bytes
  segmentBytes: 1460,
  lossShare: 0,
};

/** Least that a sender adds to the round trip before it sends a segment again. Milliseconds. */
const RETRANSMIT_LEAST_MS = 200;

export interface Cut {
  readonly direction: Direction;
  readonly breaking: Breaking;
  readonly bytesLeast: number;
  readonly missingBytes: number;
  readonly done: () => void;
}

/**
 * A TCP proxy on the loopback between one worker and its coordinator, which makes a wide-area line of it: delay, narrow
 * bandwidth, loss, breaks, silence.
 *
 * Loss is modelled as what TCP makes of it: no byte is missing, but the lost segment comes one retransmission timeout
 * later (round trip + 200 ms, doubled at each further loss of it; RFC 6298), and so does everything behind it, for
 * bytes come in order. Faster repair (RFC 5681, section 3.2) is left out, so that the model is the worse case. A
 * connection takes one round trip to come about. Slow start is not modelled.
 */
export class SlowLink {
  line: Line;
  connections = 0;
  segments = 0;
  segmentsLost = 0;
  /** Most bytes that were under way at once in one direction of one connection. */
  underWayMost = 0;
  partitioned = false;
  readonly random: Random;
  readonly #server: Server;
  readonly #open = new Set<SlowConnection>();
  #cut: Cut | null = null;

  private constructor(
    readonly targetPort: number,
    line: Partial<Line>,
    seed: number,
  ) {
    this.line = { ...PERFECT, ...line };
    this.random = seededRandom(seed);
    this.#server = createServer({ allowHalfOpen: true, pauseOnConnect: true }, (worker) => {
      this.connections += 1;
      const connection = new SlowConnection(this, worker);
      this.#open.add(connection);
      connection.onGone(() => this.#open.delete(connection));
    });
  }

  /** A line to a port of the loopback; `seed` decides what is lost. */
  static async open(targetPort: number, line: Partial<Line>, seed: number): Promise<SlowLink> {
    const link = new SlowLink(targetPort, line, seed);
    await new Promise<void>((resolve, reject) => {
      link.#server.once('error', reject);
      link.#server.listen(0, '127.0.0.1', resolve);
    });
    return link;
  }

  get port(): number {
    return (this.#server.address() as AddressInfo).port;
  }

  /** Connections that are open at either end. */
  get openCount(): number {
    return this.#open.size;
  }

  /** What is not said is perfect. What is under way already keeps its time. */
  setLine(line: Partial<Line>): void {
    this.line = { ...PERFECT, ...line };
  }

  /**
   * Breaks the connection in the middle of the next frame of at least `bytesLeast` bytes in that direction: all of
   * what was read with it but the last `missingBytes` goes over, then the line breaks at both ends. To be called on a
   * link past its upgrade. Resolves when it is done.
   */
  cutMidFrame(
    direction: Direction,
    breaking: Breaking,
    { bytesLeast = 150, missingBytes = 40 } = {},
  ): Promise<void> {
    return new Promise((resolve) => {
      this.#cut = { direction, breaking, bytesLeast, missingBytes, done: resolve };
    });
  }

  /** From now on the open connections carry nothing, not even their end; both ends see them open. New ones work. */
  silence(): void {
    for (const connection of this.#open) connection.silence();
  }

  /** Breaks the silent connections with a reset at both ends: what is between has forgotten them. */
  forgetSilent(): void {
    for (const connection of this.#open) if (connection.silent) connection.break('reset');
  }

  /** Nothing goes over, new connections included, until `heal`; then everything that waited does. */
  partition(): void {
    this.partitioned = true;
    for (const connection of this.#open) connection.look();
  }

  heal(): void {
    this.partitioned = false;
    for (const connection of this.#open) connection.look();
  }

  async close(): Promise<void> {
    for (const connection of this.#open) connection.destroy();
    await new Promise((resolve) => this.#server.close(resolve));
  }

  /** The cut that is due on these bytes, once. */
  takeCut(direction: Direction, bytes: number): Cut | null {
    const cut = this.#cut;
    if (cut === null || cut.direction !== direction || bytes < cut.bytesLeast) return null;
    this.#cut = null;
    return cut;
  }

  /** When a segment that leaves at `departsMs` is there. */
  arrivesMs(departsMs: number): number {
    const { oneWayMs, lossShare } = this.line;
    this.segments += 1;
    let timeoutMs = 2 * oneWayMs + RETRANSMIT_LEAST_MS;
    let arrivesMs = departsMs + oneWayMs;
    for (; this.random.uniform() < lossShare; timeoutMs *= 2) {
      this.segmentsLost += 1;
      arrivesMs += timeoutMs;
    }
    return arrivesMs;
  }
}
