/** A message that comes in pieces, or in part: it arrives whole or not at all. Over TCP, as the network might cut it. */
import { createServer, type IncomingMessage, type Server } from 'node:http';
import { type AddressInfo, connect, type Socket } from 'node:net';
import type { Duplex } from 'node:stream';
import { setImmediate as turn } from 'node:timers/promises';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { encodeMessage } from '../../protocol/codec.js';
import type { Link } from '../../protocol/link/link.js';
import { linkServer } from '../../protocol/link/websocket.js';
import type { Answer } from '../../protocol/messages/round.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { SUBPROTOCOL } from '../../protocol/version.js';
import { answer, hello, refusal } from '../support/messages.js';

/** A frame of 16 bits of length, and one of 64 bits. */
const larger = (numbers: number): Answer => ({
  ...answer,
  work: [{ work: 'factor', factors: [Float64Array.from({ length: numbers }, (_, i) => 1 / (i + 1))] }],
});
const SMALL: readonly ToCoordinator[] = [hello, answer, refusal];
const LARGE = larger(20_000);

/** One connection at both ends: raw at the peer's, a link at the coordinator's. */
interface Pair {
  readonly peer: Socket;
  readonly coordinator: Socket;
  readonly messages: ToCoordinator[];
  readonly closings: number[];
}

/** Looks again at every turn of the event loop; the test's own time is the bound. */
async function until(look: () => boolean): Promise<void> {
  while (!look()) await turn();
}

const isSame = (received: ToCoordinator, sent: ToCoordinator): boolean =>
  Buffer.compare(encodeMessage(received), encodeMessage(sent)) === 0;

const links = linkServer();
let server: Server;
const waiting: ((pair: Omit<Pair, 'peer'>) => void)[] = [];
const peers: Socket[] = [];

beforeAll(async () => {
  server = createServer();
  server.on('upgrade', (request: IncomingMessage, socket: Duplex, head: Buffer) => {
    links.upgrade(request, socket, head, (link: Link<ToWorker, ToCoordinator>) => {
      const messages: ToCoordinator[] = [];
      const closings: number[] = [];
      link.onMessage((message) => messages.push(message));
      link.onClose((code) => closings.push(code));
      waiting.shift()?.({ coordinator: request.socket, messages, closings });
    });
  });
  await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
});
afterAll(async () => {
  for (const peer of peers) peer.destroy();
  await new Promise((resolve) => server.close(resolve));
});

async function pair(): Promise<Pair> {
  const accepted = new Promise<Omit<Pair, 'peer'>>((resolve) => waiting.push(resolve));
  const peer = connect((server.address() as AddressInfo).port, '127.0.0.1');
  peer.setNoDelay(true).on('error', () => undefined);
  peer.resume();
  peers.push(peer);
  peer.write(
    [
      ...['GET /v1/site HTTP/1.1', 'Host: coordinator', 'Connection: Upgrade', 'Upgrade: websocket'],
      ...['Sec-WebSocket-Version: 13', 'Sec-WebSocket-Key: AAAAAAAAAAAAAAAAAAAAAA=='],
      `Sec-WebSocket-Protocol: ${SUBPROTOCOL}\r\n\r\n`,
    ].join('\r\n'),
  );
  return { peer, ...(await accepted) };
}

const OPCODE = { more: 0, binary: 2, ping: 9 } as const;

/** A masked frame (RFC 6455, section 5.2). */
function framed(payload: Uint8Array, opcode: number, last: boolean): Buffer {
  const { length } = payload;
  const extended = length < 126 ? 0 : length < 65_536 ? 2 : 8;
  const head = Buffer.alloc(2 + extended);
  head[0] = (last ? 0x80 : 0) | opcode;
  head[1] = 0x80 | (extended === 0 ? length : extended === 2 ? 126 : 127);
  if (extended === 2) head.writeUInt16BE(length, 2);
  if (extended === 8) head.writeBigUInt64BE(BigInt(length), 2);
  const mask = Buffer.from([0x5a, 0x01, 0xff, 0x80]);
  return Buffer.concat([head, mask, payload.map((byte, i) => byte ^ mask[i % 4])]);
}

/** Writes a piece and waits until the other end has read it, so that it is a segment of its own. */
async function segment({ peer, coordinator }: Pair, bytes: Uint8Array): Promise<void> {
  if (bytes.length === 0) return;
  const target = coordinator.bytesRead + bytes.length;
  peer.write(bytes);
  await until(() => coordinator.destroyed || coordinator.bytesRead >= target);
}

/** Up to `most` places to cut at, both ends and the head of the frame always among them. */
function cuts(length: number, most: number): number[] {
  if (length + 1 <= most) return Array.from({ length: length + 1 }, (_, i) => i);
  const even = Array.from({ length: most }, (_, i) => Math.round((i * length) / (most - 1)));
  return [...new Set([...Array.from({ length: 16 }, (_, i) => i), ...even, length - 1])];
}

describe('in two fragments of one message', () => {
  test.each(SMALL.map((message) => [message.kind, message] as const))(
    '%s, at every byte',
    async (_, message) => {
      const payload = encodeMessage(message);
      const link = await pair();
      const places = cuts(payload.length, Number.POSITIVE_INFINITY);
      for (const at of places) {
        // A ping may come between the fragments of a message (RFC 6455, section 5.4).
        link.peer.write(framed(payload.subarray(0, at), OPCODE.binary, false));
        if (at % 3 === 0) link.peer.write(framed(new Uint8Array(), OPCODE.ping, true));
        link.peer.write(framed(payload.subarray(at), OPCODE.more, true));
      }
      await until(() => link.messages.length === places.length);
      expect(link.messages.every((received) => isSame(received, message))).toBe(true);
      expect(link.closings).toEqual([]);
    },
  );

  test('one byte a fragment', async () => {
    const payload = encodeMessage(answer);
    const link = await pair();
    for (const [at, byte] of payload.entries()) {
      link.peer.write(
        framed(Uint8Array.of(byte), at === 0 ? OPCODE.binary : OPCODE.more, at === payload.length - 1),
      );
    }
    await until(() => link.messages.length > 0);
    expect(link.messages).toEqual([answer]);
  });
});

describe('in two segments of the connection', () => {
  test.each([
    ...SMALL.map((message) => [message.kind, message] as const),
    ['a large answer', LARGE] as const,
  ])('%s', async (_, message) => {
    const bytes = framed(encodeMessage(message), OPCODE.binary, true);
    const link = await pair();
    const places = cuts(bytes.length, message === LARGE ? 40 : Number.POSITIVE_INFINITY);
    for (const [done, at] of places.entries()) {
      await segment(link, bytes.subarray(0, at));
      if (at < bytes.length) expect(link.messages.length).toBe(done);
      await segment(link, bytes.subarray(at));
      await until(() => link.messages.length === done + 1);
      expect(isSame(link.messages[done], message)).toBe(true);
    }
    expect(link.closings).toEqual([]);
  });
});

describe('cut off, and the connection ended', () => {
  test.each([
    ...SMALL.map((message) => [message.kind, message] as const),
    ['a large answer', LARGE] as const,
  ])('%s: nothing arrives, and the link closes once as lost', async (_, message) => {
    const bytes = framed(encodeMessage(message), OPCODE.binary, true);
    const places = cuts(bytes.length, message === LARGE ? 40 : Number.POSITIVE_INFINITY);
    const cutOff = async (at: number): Promise<void> => {
      const link = await pair();
      await segment(link, bytes.subarray(0, at));
      if (at % 2 === 0) link.peer.end();
      else link.peer.resetAndDestroy();
      await until(() => link.closings.length > 0);
      expect(link.messages).toHaveLength(at === bytes.length ? 1 : 0);
      expect(link.messages.every((received) => isSame(received, message))).toBe(true);
      expect(link.closings).toEqual([CLOSE_CODES.connectionLost]);
    };
    for (let from = 0; from < places.length; from += 32) {
      await Promise.all(places.slice(from, from + 32).map(cutOff));
    }
  });

  test('after the first fragment of two', async () => {
    const payload = encodeMessage(hello);
    for (const at of [0, 1, 50, payload.length]) {
      const link = await pair();
      await segment(link, framed(payload.subarray(0, at), OPCODE.binary, false));
      link.peer.end();
      await until(() => link.closings.length > 0);
      expect(link).toMatchObject({ messages: [], closings: [CLOSE_CODES.connectionLost] });
    }
  });
});
