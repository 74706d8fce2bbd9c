import { connect, type Socket } from 'node:net';
import { SUBPROTOCOL } from '../../protocol/version.js';

/** How a connection was refused: by an HTTP problem or by a close frame. */
export type Refusal = `http ${number} ${string}` | `close ${number}`;

/** More than any refusal takes; what comes beyond it is not kept. */
const KEPT_BYTES_MOST = 65_536;

/** A TCP connection from an address of its own on loopback, that may send anything. */
export class Peer {
  readonly socket: Socket;
  /** Resolves when the connection has ended, however. */
  readonly ended: Promise<void>;
  private received = Buffer.alloc(0);

  constructor(address: string, localAddress: string) {
    const { hostname, port } = new URL(address);
    this.socket = connect({ host: hostname, port: Number(port), localAddress });
    this.socket.on('data', (piece) => {
      if (this.received.length < KEPT_BYTES_MOST) this.received = Buffer.concat([this.received, piece]);
    });
    this.socket.on('error', () => undefined);
    this.ended = new Promise((resolve) => this.socket.once('close', () => resolve()));
  }

  write(bytes: string | Uint8Array): void {
    this.socket.write(bytes);
  }

  /** Asks for a link (RFC 6455, section 4.1). */
  upgrade(token: string): void {
    this.write(upgradeRequest(token));
  }

  /** Waits for the answer to the upgrade, or the end: whether it is a link now. */
  async linked(): Promise<boolean> {
    while (!this.received.includes('\r\n\r\n') && !this.socket.closed) {
      await new Promise<void>((resolve) => {
        this.socket.once('data', () => resolve());
        this.socket.once('close', () => resolve());
      });
    }
    return this.received.toString('latin1', 0, 12) === 'HTTP/1.1 101';
  }

  /** How the connection was refused, or null: no code came. */
  refusal(): Refusal | null {
    const end = this.received.indexOf('\r\n\r\n');
    if (end < 0) return null;
    const status = Number(this.received.toString('latin1', 9, 12));
    const rest = this.received.subarray(end + 4);
    if (status !== 101) return `http ${status} ${codeIn(rest)}`;
    const code = closeCodeIn(rest);
    return code === null ? null : `close ${code}`;
  }
}

export const upgradeRequest = (token: string): string =>
  [
    'GET /v1/site HTTP/1.1',
    'Host: coordinator',
    ...['Connection: Upgrade', 'Upgrade: websocket', 'Sec-WebSocket-Version: 13'],
    'Sec-WebSocket-Key: AAAAAAAAAAAAAAAAAAAAAA==',
    `Sec-WebSocket-Protocol: ${SUBPROTOCOL}`,
    `Authorization: Bearer ${token}`,
    '\r\n',
  ].join('\r\n');

function codeIn(body: Buffer): string {
  const code = /"code":"([a-z-]+)"/.exec(body.toString('utf8'))?.[1];
  return code ?? 'without a code';
}

/** The code of the first close frame; servers do not mask (RFC 6455, section 5.1). */
function closeCodeIn(frames: Buffer): number | null {
  for (let at = 0; at + 2 <= frames.length; ) {
    const short = frames[at + 1] & 0x7f;
    const headBytes = short === 126 ? 4 : short === 127 ? 10 : 2;
    if (at + headBytes > frames.length) return null;
    const length =
      short === 126
        ? frames.readUInt16BE(at + 2)
        : short === 127
          ? Number(frames.readBigUInt64BE(at + 2))
          : short;
    if ((frames[at] & 0x0f) === 8) return at + 4 <= frames.length ? frames.readUInt16BE(at + 2) : null;
    at += headBytes + length;
  }
  return null;
}

/** A masked binary frame (the mask is zero, which leaves the payload as it is). */
export function frame(payload: Uint8Array): Buffer {
  const { length } = payload;
  if (length < 126) return Buffer.concat([Buffer.of(0x82, 0x80 | length), Buffer.alloc(4), payload]);
  const head = Buffer.alloc(8);
  head.writeUInt8(0x82, 0);
  head.writeUInt8(0x80 | 126, 1);
  head.writeUInt16BE(length, 2);
  return Buffer.concat([head, payload]);
}

/** Runs `task` for 0 … count − 1, so many at once. */
export async function inTurns(
  count: number,
  atOnce: number,
  task: (index: number) => Promise<void>,
): Promise<void> {
  let next = 0;
  const runner = async (): Promise<void> => {
    while (next < count) {
      const index = next;
      next += 1;
      await task(index);
    }
  };
  await Promise.all(Array.from({ length: Math.min(atOnce, count) }, runner));
}
