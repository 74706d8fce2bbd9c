/** What every link keeps to, run over the memory link and over a WebSocket on the loopback address. */
import { createServer } from 'node:http';
import type { AddressInfo } from 'node:net';
import { afterEach, describe, expect, test, vi } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { encodeMessage } from '../../protocol/codec.js';
import type { Link } from '../../protocol/link/link.js';
import { memoryLinks } from '../../protocol/link/memory.js';
import { connectLink, linkServer } from '../../protocol/link/websocket.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { answer, ask, hello, prepare, refusal, runEnd, welcome } from '../support/messages.js';

/** Small limits, so that a full buffer is a matter of milliseconds. */
vi.mock('../../protocol/limits.js', async (original) => {
  const { LIMITS } = await original<typeof import('../../protocol/limits.js')>();
  return { LIMITS: { ...LIMITS, frameBytesMost: 2 ** 20, sendBufferBytesMost: 2 ** 22 } };
});

interface Pair {
  coordinator: Link<ToWorker, ToCoordinator>;
  worker: Link<ToCoordinator, ToWorker>;
  end(): Promise<void>;
}

async function memoryPair(): Promise<Pair> {
  return { ...memoryLinks((run) => queueMicrotask(run)), end: async () => undefined };
}

async function websocketPair(): Promise<Pair> {
  const server = createServer();
  const links = linkServer();
  const accepted = new Promise<Link<ToWorker, ToCoordinator>>((resolve) => {
    server.on('upgrade', (request, socket, head) => links.upgrade(request, socket, head, resolve));
  });
  await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
  const { port } = server.address() as AddressInfo;
  const worker = await connectLink({ url: `ws://127.0.0.1:${port}/v1/site`, token: 'any' });
  if (!worker.ok) throw new Error(worker.failure.message);
  return {
    coordinator: await accepted,
    worker: worker.value,
    end: () => new Promise((resolve) => server.close(() => resolve())),
  };
}

interface Heard<Incoming> {
  readonly messages: Incoming[];
  readonly closings: { code: number; reason: string }[];
  /** Resolves when `count` messages were heard. */
  until(count: number): Promise<void>;
  readonly closed: Promise<void>;
}

function listen<Outgoing, Incoming>(link: Link<Outgoing, Incoming>): Heard<Incoming> {
  const messages: Incoming[] = [];
  const closings: { code: number; reason: string }[] = [];
  let wake = (): void => undefined;
  link.onMessage((message) => {
    messages.push(message);
    wake();
  });
  const closed = new Promise<void>((resolve) => {
    link.onClose((code, reason) => {
      closings.push({ code, reason });
      resolve();
    });
  });
  const until = (count: number): Promise<void> =>
    new Promise((resolve) => {
      wake = () => {
        if (messages.length >= count) resolve();
      };
      wake();
    });
  return { messages, closings, until, closed };
}

describe.each([
  ['memory link', memoryPair],
  ['websocket link', websocketPair],
])('%s', (_, open) => {
  let pair: Pair | null = null;
  const opened = async (): Promise<Pair> => {
    pair = await open();
    return pair;
  };
  afterEach(async () => {
    pair?.worker.close(CLOSE_CODES.normal, '');
    pair?.coordinator.close(CLOSE_CODES.normal, '');
    await pair?.end();
    pair = null;
  });

  test('carries whole messages in order, both ways', async () => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    const atCoordinator = listen(coordinator);
    for (const message of [hello, answer, refusal]) expect(worker.send(message)).toBe(true);
    for (const message of [welcome, prepare, ask, runEnd]) expect(coordinator.send(message)).toBe(true);
    await Promise.all([atWorker.until(4), atCoordinator.until(3)]);
    expect(atWorker.messages).toEqual([welcome, prepare, ask, runEnd]);
    expect(atCoordinator.messages).toEqual([hello, answer, refusal]);
  });

  test('keeps messages until somebody listens', async () => {
    const { coordinator, worker } = await opened();
    coordinator.send(welcome);
    coordinator.send(runEnd);
    await new Promise((resolve) => setTimeout(resolve, 20));
    const atWorker = listen(worker);
    await atWorker.until(2);
    expect(atWorker.messages).toEqual([welcome, runEnd]);
  });

  test('hands over copies: what the sender changes afterwards is not seen', async () => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    const point = Float64Array.from([1, 2]);
    const work = {
      work: 'evaluate' as const,
      problem: 0,
      part: null,
      points: [{ point, want: 'value' as const }],
    };
    coordinator.send({ ...ask, work: [{ ...work, ownFit: null, sketch: null }] });
    point.fill(9);
    await atWorker.until(1);
    expect(atWorker.messages[0]).toMatchObject({
      work: [{ points: [{ point: Float64Array.from([1, 2]) }] }],
    });
  });

  test('counts the payload bytes at both ends', async () => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    coordinator.send(ask);
    coordinator.send(welcome);
    await atWorker.until(2);
    const bytes = encodeMessage(ask).length + encodeMessage(welcome).length;
    expect(coordinator.bytesSent).toBe(bytes);
    expect(worker.bytesReceived).toBe(bytes);
    expect(worker.bytesSent).toBe(0);
  });

  test('delivers what was sent before a close, then the code and the reason, once, at both ends', async () => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    const atCoordinator = listen(coordinator);
    coordinator.send(runEnd);
    coordinator.close(CLOSE_CODES.replaced, 'a newer link of the same member');
    coordinator.close(CLOSE_CODES.normal, 'too late');
    expect(coordinator.open).toBe(false);
    await Promise.all([atWorker.closed, atCoordinator.closed]);
    const closings = [{ code: CLOSE_CODES.replaced, reason: 'a newer link of the same member' }];
    expect(atWorker.messages).toEqual([runEnd]);
    expect(atWorker.closings).toEqual(closings);
    expect(atCoordinator.closings).toEqual(closings);
    expect(worker.open).toBe(false);
  });

  test('takes nothing after a close', async () => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    listen(coordinator);
    worker.close(CLOSE_CODES.goingAway, 'stopping');
    expect(worker.send(hello)).toBe(false);
    coordinator.send(welcome);
    await atWorker.closed;
    expect(coordinator.send(welcome)).toBe(false);
    expect(atWorker.messages).toEqual([]);
  });

  test('a reason too long for a close frame is cut between characters', async () => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    listen(coordinator);
    coordinator.close(CLOSE_CODES.frameMalformed, 'é'.repeat(100));
    await atWorker.closed;
    expect(atWorker.closings).toEqual([{ code: CLOSE_CODES.frameMalformed, reason: 'é'.repeat(61) }]);
  });

  const nan = Float64Array.of(Number.NaN);
  test.each([
    ['another version', { ...hello, version: 2 }, CLOSE_CODES.versionUnsupported],
    ['an unknown kind', { kind: 'shutdown' }, CLOSE_CODES.messageUnexpected],
    ['a kind of the other direction', ask, CLOSE_CODES.messageUnexpected],
    ['a field missing', { kind: 'answer' }, CLOSE_CODES.frameMalformed],
    [
      'NaN in a vector',
      { ...answer, work: [{ work: 'factor', factors: [nan] }] },
      CLOSE_CODES.frameMalformed,
    ],
  ])('%s closes the link with the code that says why', async (_name, message, code) => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    const atCoordinator = listen(coordinator);
    worker.send(message as ToCoordinator);
    worker.send(hello);
    await Promise.all([atWorker.closed, atCoordinator.closed]);
    expect(atCoordinator.messages).toEqual([]);
    expect(atWorker.closings).toMatchObject([{ code }]);
    expect(atWorker.closings[0].reason).not.toBe('');
    expect(atCoordinator.closings).toEqual(atWorker.closings);
  });

  test('a message larger than a frame may be closes the link instead of going round for ever', async () => {
    const { coordinator, worker } = await opened();
    const atWorker = listen(worker);
    listen(coordinator);
    const point = new Float64Array(2 ** 17);
    const work = {
      work: 'evaluate' as const,
      problem: 0,
      part: null,
      points: [{ point, want: 'value' as const }],
    };
    expect(coordinator.send({ ...ask, work: [{ ...work, ownFit: null, sketch: null }] })).toBe(false);
    await atWorker.closed;
    expect(atWorker.closings).toMatchObject([{ code: CLOSE_CODES.frameTooLarge }]);
    expect(coordinator.bytesSent).toBe(0);
  });

  test('send says no when the peer does not read and the buffer is full', async () => {
    const { coordinator, worker } = await opened();
    const point = new Float64Array(2 ** 16);
    const work = {
      work: 'evaluate' as const,
      problem: 0,
      part: null,
      points: [{ point, want: 'value' as const }],
    };
    const large: ToWorker = { ...ask, work: [{ ...work, ownFit: null, sketch: null }] };
    let sent = 0;
    while (sent < 200 && coordinator.send(large)) sent++;
    expect(sent).toBeGreaterThanOrEqual(7);
    expect(sent).toBeLessThan(200);
    expect(coordinator.open).toBe(true);
    const atWorker = listen(worker);
    await atWorker.until(sent);
    expect(coordinator.send(runEnd)).toBe(true);
  });
});
