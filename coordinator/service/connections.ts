import type { Server, Socket } from 'node:net';
import type { Duplex } from 'node:stream';
import { fail } from '../../protocol/failure.js';
import type { Notice } from './host-parts.js';
import { peerKey } from './peer-address.js';
import { problemOf, problemReply } from './problem.js';
import { RateLimiter } from './rate.js';

export interface ConnectionLimits {
  /** Connections at once that are no links of workers, over all addresses, and of one. */
  readonly connectionsMost: number;
  readonly connectionsPerAddressMost: number;
}

/** A line about an address that is turned away is logged at most this often. */
const NOTICE_RATE = { burst: 1, perMinute: 1 } as const;

/**
 * Turns connections away beyond the limits: with a problem (503, `coordinator-full`) on plain text; behind TLS they are
 * closed before the handshake, which costs more than the connection.
 */
export class Connections {
  /** By peer: address and port. */
  private readonly open = new Map<string, { readonly address: string; readonly socket: Socket }>();
  private readonly ofAddress = new Map<string, number>();
  private readonly notices = new RateLimiter(NOTICE_RATE, 1000);

  constructor(
    private readonly limits: ConnectionLimits,
    private readonly steadyMs: () => number,
    private readonly notice: (notice: Notice) => void,
  ) {}

  get count(): number {
    return this.open.size;
  }

  guard(server: Server, tls: boolean): void {
    server.on('connection', (socket: Socket) => {
      const peer = peerOf(socket);
      const address = peerKey(socket.remoteAddress);
      if (this.isFull(address)) {
        this.turnAway(socket, address, tls);
        return;
      }
      this.open.set(peer, { address, socket });
      this.ofAddress.set(address, (this.ofAddress.get(address) ?? 0) + 1);
      socket.once('close', () => this.release(peer));
    });
  }

  /** The connection has become a worker's link and counts as one. */
  linked(socket: Duplex): void {
    this.release(peerOf(socket as Socket));
  }

  /** Breaks those that are left when the service stops: a peer that never sent a request would keep it from its end. */
  breakAll(): void {
    for (const { socket } of this.open.values()) socket.destroy();
  }

  private isFull(address: string): boolean {
    const { connectionsMost, connectionsPerAddressMost } = this.limits;
    return (
      this.open.size >= connectionsMost || (this.ofAddress.get(address) ?? 0) >= connectionsPerAddressMost
    );
  }

  private turnAway(socket: Socket, address: string, tls: boolean): void {
    const { failure } = fail('coordinator-full', 'There are too many connections at present.');
    socket.once('error', () => socket.destroy());
    if (tls) socket.destroy();
    else {
      socket.write(problemReply(problemOf(failure)));
      socket.destroySoon();
    }
    if (this.notices.take(address, this.steadyMs()) > 0) return;
    const message = `Connections of ${address} are turned away: there are too many.`;
    this.notice({ level: 'warn', code: failure.code, message, detail: { open: this.open.size } });
  }

  private release(peer: string): void {
    const found = this.open.get(peer);
    if (found === undefined) return;
    const { address } = found;
    this.open.delete(peer);
    const left = (this.ofAddress.get(address) ?? 1) - 1;
    if (left === 0) this.ofAddress.delete(address);
    else this.ofAddress.set(address, left);
  }
}

/** The same for a TCP connection and the TLS connection on it. */
const peerOf = ({ remoteAddress, remotePort }: Socket): string => `${remoteAddress} ${remotePort}`;
