import { connect, type Socket } from 'node:net';
import { setTimeout as delay } from 'node:timers/promises';
import { describe, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { encodeMessage } from '../../protocol/codec.js';
import { until } from '../support/processes.js';
import { frameHead, RawSocket } from '../support/raw-socket.js';
import {
  analystToken,
  bench,
  call,
  expectRunSolved,
  siteToken,
  start,
  submit,
} from '../support/service-bench.js';
import { helloOf } from '../support/toy-site.js';

/** Peers that send byte by byte, stop half way, or do not read. Each is let go of in bounded time, with its code. */
const QUICK = { headDeadlineMs: 400, requestDeadlineMs: 1200, readDeadlineMs: 1500 };

const codeIn = (raw: Buffer): unknown =>
  (JSON.parse(raw.toString('utf8').split('\r\n\r\n')[1] ?? '{}') as { code?: unknown }).code;

/** Sends one byte every so often, until the connection ends. */
async function drip(raw: RawSocket, bytes: Uint8Array, everyMs: number): Promise<void> {
  for (const byte of bytes) {
    if (raw.ended) return;
    raw.write(Uint8Array.of(byte));
    await delay(everyMs);
  }
}

describe('slow writers', () => {
  test.each([
    ['that says nothing', ''],
    ['with half a request line', 'GET /v1/ru'],
    ['with half a head', 'GET /v1/runs HTTP/1.1\r\nHost: c\r\nAuthoriz'],
  ])('a connection %s is answered 408 and ended', async (_, bytes) => {
    const raw = await RawSocket.open(await start(QUICK));
    raw.write(bytes);
    await until('the end', () => raw.ended);
    expect(raw.received.toString('latin1')).toMatch(/^HTTP\/1\.1 408 /);
    expect(codeIn(raw.received)).toBe('too-slow');
  });

  test('an upgrade that comes byte by byte is, too', async () => {
    const address = await start(QUICK);
    const raw = await RawSocket.open(address);
    const upgrade = `GET /v1/site HTTP/1.1\r\nHost: c\r\nAuthorization: Bearer ${await siteToken('harrowmere')}\r\n`;
    await Promise.all([drip(raw, Buffer.from(upgrade), 30), until('the end', () => raw.ended)]);
    expect(codeIn(raw.received)).toBe('too-slow');
    await expectRunSolved(address);
  });

  test('a body that does not come is, too', async () => {
    const raw = await RawSocket.open(await start(QUICK));
    raw.write(
      `POST /v1/runs HTTP/1.1\r\nHost: c\r\nAuthorization: Bearer ${await analystToken()}\r\n` +
        'Content-Type: application/json\r\nContent-Length: 5000000\r\n\r\n{"spec',
    );
    await until('the end', () => raw.ended);
    expect(codeIn(raw.received)).toBe('too-slow');
  });

  test('a hello that comes byte by byte is late: 4005', { timeout: 30_000 }, async () => {
    const address = await start();
    const raw = await RawSocket.upgraded(address, await siteToken('harrowmere'));
    const hello = encodeMessage(helloOf('harrowmere'));
    const frame = Buffer.concat([frameHead(BigInt(hello.length)), hello]);
    const dripping = drip(raw, frame, 400);
    expect(await raw.closeCode()).toBe(CLOSE_CODES.helloLate);
    await until('the end', () => raw.ended);
    await dripping;
  });
});

describe('slow readers', () => {
  /** A connection that sends a request and does not read: its receive window fills. */
  async function unread(address: string, request: string): Promise<Socket> {
    const { port } = new URL(address);
    const socket = connect({ port: Number(port), host: '127.0.0.1' });
    socket.on('error', () => undefined);
    socket.pause();
    await until('a connection', () => !socket.connecting);
    socket.write(request);
    return socket;
  }

  const asking = (path: string, token: string): string =>
    `GET ${path} HTTP/1.1\r\nHost: c\r\nAuthorization: Bearer ${token}\r\n\r\n`;

  test('of a round log: the stream is ended and its place is free again', { timeout: 30_000 }, async () => {
    const address = await start({ ...QUICK, streamsPerAnalystMost: 1 });
    const run = await submit();
    const { appendFile } = await import('node:fs/promises');
    // more than the buffers of both ends take
    const line = `${JSON.stringify({ event: 'late', note: 'x'.repeat(1_000_000) })}\n`;
    for (let at = 0; at < 12; at++) await appendFile(`${bench.state}/runs/${run}/log.jsonl`, line);
    const path = `/v1/runs/${run}/log`;
    const watcher = await unread(address, asking(path, await analystToken()));
    await until('the place to be taken', async () => (await refusedStream(path)) === 503);
    await until('the place to be free', async () => (await refusedStream(path)) === 200);
    watcher.destroy();
  });

  /** The status that one more stream gets; it is let go at once. */
  async function refusedStream(path: string): Promise<number> {
    const stop = new AbortController();
    const { status } = await call(path, { signal: stop.signal });
    stop.abort();
    return status;
  }

  test('of any other reply: the connection is ended', { timeout: 30_000 }, async () => {
    const address = await start(QUICK);
    const run = await submit();
    expect((await call(`/v1/runs/${run}/cancel`, { method: 'POST' })).status).toBe(202);
    await until('the end', async () => (await call(`/v1/runs/${run}/result`)).status === 200);
    const { writeFile } = await import('node:fs/promises');
    await writeFile(`${bench.state}/runs/${run}/result.json`, 'x'.repeat(30_000_000));
    const reader = await unread(address, asking(`/v1/runs/${run}/result`, await analystToken()));
    await delay(3 * QUICK.readDeadlineMs);
    reader.resume();
    await until('the end', () => reader.closed);
    expect(reader.bytesRead).toBeLessThan(30_000_000);
  });
});

test('a worker that pings and does not read its pongs is cut off before they pile up', async () => {
  const address = await start();
  const raw = await RawSocket.upgraded(address, await siteToken('harrowmere'));
  raw.socket.pause();
  const ping = Buffer.concat([Buffer.of(0x89, 0x80 | 125), Buffer.alloc(4), Buffer.alloc(125, 7)]);
  const many = Buffer.concat(Array.from({ length: 2000 }, () => ping));
  const before = process.memoryUsage().rss;
  // the buffers of both ends take some megabytes; what comes beyond them would wait in the service
  for (let at = 0; at < 200 && !raw.ended; at++) {
    raw.write(many);
    await delay(5);
  }
  expect(process.memoryUsage().rss - before).toBeLessThan(200_000_000);
  raw.socket.resume();
  await until('the end', () => raw.ended);
  await expectRunSolved(address);
});
