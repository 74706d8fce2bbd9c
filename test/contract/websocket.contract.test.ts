/** What only a socket can do: the upgrade, raw frames, silence. */
import { createServer, type IncomingMessage, type Server } from 'node:http';
import type { AddressInfo } from 'node:net';
import type { Duplex } from 'node:stream';
import { afterEach, describe, expect, test, vi } from 'vitest';
import { WebSocket, WebSocketServer } from 'ws';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { decodeToCoordinator, encodeMessage } from '../../protocol/codec.js';
import { LIMITS } from '../../protocol/limits.js';
import type { Link } from '../../protocol/link/link.js';
import { connectLink, linkServer } from '../../protocol/link/websocket.js';
import { websocketLink } from '../../protocol/link/websocket-link.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { SUBPROTOCOL } from '../../protocol/version.js';
import { hello } from '../support/messages.js';

/** A small frame limit, so that an oversize frame is quickly sent. */
vi.mock('../../protocol/limits.js', async (original) => {
  const { LIMITS } = await original<typeof import('../../protocol/limits.js')>();
  return { LIMITS: { ...LIMITS, frameBytesMost: 2 ** 20 } };
});

const servers: Server[] = [];
const sockets: WebSocket[] = [];
afterEach(async () => {
  vi.useRealTimers();
  for (const socket of sockets.splice(0)) socket.terminate();
  await Promise.all(
    servers.splice(0).map((server) => {
      server.closeAllConnections();
      return new Promise((resolve) => server.close(resolve));
    }),
  );
});

type Upgrade = (request: IncomingMessage, socket: Duplex, head: Buffer) => void;

async function serve(upgrade: Upgrade): Promise<string> {
  const server = createServer();
  servers.push(server);
  server.on('upgrade', upgrade);
  await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
  return `ws://127.0.0.1:${(server.address() as AddressInfo).port}/v1/site`;
}

describe('connecting', () => {
  const answering =
    (status: string): Upgrade =>
    (_, socket) => {
      socket.end(`HTTP/1.1 ${status}\r\nConnection: close\r\nContent-Length: 0\r\n\r\n`);
    };
  async function codeWith(upgrade: Upgrade): Promise<string> {
    const link = await connectLink({ url: await serve(upgrade), token: 't' });
    return link.ok ? 'ok' : link.failure.code;
  }

  test('sends the token in the Authorization header', async () => {
    let authorization: string | undefined;
    await codeWith((request, socket, head) => {
      authorization = request.headers.authorization;
      answering('403 Forbidden')(request, socket, head);
    });
    expect(authorization).toBe('Bearer t');
  });

  test('HTTP 401 and 403 mean that the token was refused', async () => {
    expect(await codeWith(answering('401 Unauthorized'))).toBe('token-refused');
    expect(await codeWith(answering('403 Forbidden'))).toBe('token-refused');
  });

  test('a server that picks no subprotocol of ours speaks another version', async () => {
    const other = new WebSocketServer({ noServer: true, handleProtocols: () => false });
    expect(
      await codeWith((request, socket, head) => other.handleUpgrade(request, socket, head, () => undefined)),
    ).toBe('version-unsupported');
    expect(await codeWith(answering('426 Upgrade Required'))).toBe('version-unsupported');
  });

  test('any other answer is a lost link, with the reason in words', async () => {
    const link = await connectLink({ url: await serve(answering('503 Service Unavailable')), token: 't' });
    expect(link).toMatchObject({
      ok: false,
      failure: { code: 'link-lost', message: expect.stringContaining('503') },
    });
    expect(await codeWith((_, socket) => socket.destroy())).toBe('link-lost');
  });

  test('nobody there, and an address that is none', async () => {
    const url = await serve(() => undefined);
    const server = servers.pop();
    await new Promise((resolve) => server?.close(resolve));
    expect(await connectLink({ url, token: 't' })).toMatchObject({
      failure: { code: 'link-lost', message: expect.stringContaining('ECONNREFUSED') },
    });
    expect(await connectLink({ url: 'not an address', token: 't' })).toMatchObject({
      failure: { code: 'link-lost' },
    });
  });

  test('the server answers a peer without our subprotocol with HTTP 426', async () => {
    const accept = vi.fn();
    const links = linkServer();
    const url = await serve((request, socket, head) => links.upgrade(request, socket, head, accept));
    const socket = new WebSocket(url, ['commonfit.v999']);
    const status = await new Promise((resolve) => {
      socket.on('error', () => undefined);
      socket.on('unexpected-response', (request, response) => {
        resolve(response.statusCode);
        request.destroy();
      });
    });
    expect(status).toBe(426);
    expect(accept).not.toHaveBeenCalled();
  });
});

interface Raw {
  readonly socket: WebSocket;
  readonly link: Link<ToWorker, ToCoordinator>;
  readonly messages: ToCoordinator[];
  /** Codes at the raw peer and at the link. */
  readonly codes: Promise<[number, number]>;
}

/** A coordinator's link, and a peer that may send anything. */
async function rawPeer(): Promise<Raw> {
  const links = linkServer();
  const messages: ToCoordinator[] = [];
  let linked = (_link: Link<ToWorker, ToCoordinator>): void => undefined;
  const accepted = new Promise<Link<ToWorker, ToCoordinator>>((resolve) => {
    linked = resolve;
  });
  const url = await serve((request, socket, head) => links.upgrade(request, socket, head, linked));
  const socket = new WebSocket(url, [SUBPROTOCOL], { perMessageDeflate: true });
  sockets.push(socket);
  socket.on('error', () => undefined);
  const peerCode = new Promise<number>((resolve) => socket.on('close', resolve));
  await new Promise((resolve) => socket.on('open', resolve));
  const link = await accepted;
  link.onMessage((message) => messages.push(message));
  const linkCode = new Promise<number>((resolve) => link.onClose(resolve));
  return { socket, link, messages, codes: Promise.all([peerCode, linkCode]) };
}

describe('raw frames', () => {
  test.each([
    ['garbage', Buffer.from('garbage')],
    ['an empty frame', Buffer.alloc(0)],
    ['half a message', encodeMessage(hello).subarray(0, 40)],
  ])('%s closes the link as malformed', async (_, bytes) => {
    const { socket, messages, codes } = await rawPeer();
    socket.send(bytes);
    socket.send(encodeMessage(hello));
    expect(await codes).toEqual([CLOSE_CODES.frameMalformed, CLOSE_CODES.frameMalformed]);
    expect(messages).toEqual([]);
  });

  test('a text frame closes the link as malformed', async () => {
    const { socket, codes } = await rawPeer();
    socket.send('{"kind":"hello"}');
    expect(await codes).toEqual([CLOSE_CODES.frameMalformed, CLOSE_CODES.frameMalformed]);
  });

  test('an oversize frame closes the link as too large', async () => {
    const { socket, codes } = await rawPeer();
    socket.send(Buffer.alloc(LIMITS.frameBytesMost + 1));
    expect(await codes).toEqual([CLOSE_CODES.frameTooLarge, CLOSE_CODES.frameTooLarge]);
  });

  test('compression is not agreed to', async () => {
    const { socket } = await rawPeer();
    expect(socket.extensions).toBe('');
  });

  test('a connection that breaks is reported as lost', async () => {
    const { socket, link, codes } = await rawPeer();
    socket.terminate();
    expect((await codes)[1]).toBe(CLOSE_CODES.connectionLost);
    expect(link.open).toBe(false);
  });
});

describe('silence', () => {
  /** A socket that only counts, so that time can be made up. `hear`: bytes come in, of whatever frame. */
  function silentSocket(): { socket: WebSocket; pings: () => number; hear: () => void; heard: () => number } {
    const socket = new WebSocket(null as never, undefined, {});
    let [pings, bytes] = [0, 0];
    Object.defineProperty(socket, 'readyState', { value: WebSocket.OPEN, writable: true });
    socket.pause = () => undefined;
    socket.resume = () => undefined;
    socket.ping = () => {
      pings++;
    };
    socket.terminate = () => {
      socket.emit('close', CLOSE_CODES.connectionLost, Buffer.alloc(0));
    };
    const hear = (): void => {
      bytes += 2;
    };
    return { socket, pings: () => pings, hear, heard: () => bytes };
  }

  test('a peer that says nothing for silenceMostMs is given up, one that sends a byte now and then is not', () => {
    vi.useFakeTimers();
    const { socket, pings, hear, heard } = silentSocket();
    const link = websocketLink<ToWorker, ToCoordinator>(socket, decodeToCoordinator, heard);
    const closings: number[] = [];
    link.onMessage(() => undefined);
    link.onClose((code) => closings.push(code));
    for (let second = 0; second < 300; second += 10) {
      vi.advanceTimersByTime(LIMITS.pingEveryMs);
      hear();
    }
    expect(pings()).toBe(30);
    expect(closings).toEqual([]);
    vi.advanceTimersByTime(LIMITS.silenceMostMs);
    expect(closings).toEqual([]);
    vi.advanceTimersByTime(LIMITS.pingEveryMs);
    expect(closings).toEqual([CLOSE_CODES.tooSlow]);
    vi.advanceTimersByTime(LIMITS.silenceMostMs * 2);
    expect(closings).toEqual([CLOSE_CODES.tooSlow]);
  });
});
