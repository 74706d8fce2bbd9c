import { connect, type Socket } from 'node:net';
import { SUBPROTOCOL } from '../../protocol/version.js';
import { until } from './processes.js';

/** A TCP connection to a coordinator that need not speak HTTP or WebSocket as it should. */
export class RawSocket {
  received = Buffer.alloc(0);
  ended = false;

  private constructor(readonly socket: Socket) {
    socket.on('data', (piece) => {
      this.received = Buffer.concat([this.received, piece]);
    });
    socket.on('error', () => undefined);
    socket.on('close', () => {
      this.ended = true;
    });
  }

  static async open(address: string): Promise<RawSocket> {
    const { hostname, port } = new URL(address);
    const socket = connect(Number(port), hostname);
    const raw = new RawSocket(socket);
    await until('a TCP connection', () => !socket.connecting);
    return raw;
  }

  /** Upgrades to WebSocket as a worker does (RFC 6455, section 4.1). */
  static async upgraded(address: string, token: string): Promise<RawSocket> {
    const raw = await RawSocket.open(address);
    raw.write(
      [
        'GET /v1/site HTTP/1.1',
        `Host: ${new URL(address).host}`,
        ...['Connection: Upgrade', 'Upgrade: websocket', 'Sec-WebSocket-Version: 13'],
        'Sec-WebSocket-Key: AAAAAAAAAAAAAAAAAAAAAA==',
        `Sec-WebSocket-Protocol: ${SUBPROTOCOL}`,
        `Authorization: Bearer ${token}`,
        '\r\n',
      ].join('\r\n'),
    );
    await until('the upgrade', () => raw.received.includes('\r\n\r\n'));
    if (!raw.received.toString('latin1').startsWith('HTTP/1.1 101'))
      throw new Error(`no upgrade: ${raw.received.toString('latin1')}`);
    raw.received = Buffer.alloc(0);
    return raw;
  }

  write(bytes: string | Uint8Array): void {
    this.socket.write(bytes);
  }

  /** The code of the close frame that comes (RFC 6455, section 5.5.1). */
  async closeCode(): Promise<number> {
    const frame = await until('a close frame', () => {
      const from = pingBytes(this.received);
      return this.received.length >= from + 4 && this.received.subarray(from);
    });
    if (frame[0] !== 0x88) throw new Error(`another frame than a close: ${frame.toString('hex')}`);
    return frame.readUInt16BE(2);
  }
}

/** Bytes of the empty pings that come before anything else. */
function pingBytes(received: Buffer): number {
  let at = 0;
  while (received[at] === 0x89 && received[at + 1] === 0) at += 2;
  return at;
}

/** The head of a masked binary frame that promises `bytes` of payload (RFC 6455, section 5.2). */
export function frameHead(bytes: bigint): Buffer {
  const head = Buffer.alloc(14);
  head.writeUInt8(0x82, 0);
  head.writeUInt8(0x80 | 127, 1);
  head.writeBigUInt64BE(bytes, 2);
  return head;
}
