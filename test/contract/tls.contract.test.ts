/** Links over TLS: whom a worker trusts. */
import { readFileSync } from 'node:fs';
import { createServer, type Server } from 'node:https';
import type { AddressInfo } from 'node:net';
import { afterEach, describe, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { connectLink, linkServer } from '../../protocol/link/websocket.js';
import { hello } from '../support/messages.js';

const servers: Server[] = [];
afterEach(async () => {
  await Promise.all(
    servers.splice(0).map((server) => {
      server.closeAllConnections();
      return new Promise((resolve) => server.close(resolve));
    }),
  );
});

describe('TLS', () => {
  /** A key pair for the loopback address that serves this test alone. */
  const pem = (name: string): string =>
    readFileSync(new URL(`../reference/tls/${name}.pem`, import.meta.url), 'utf8');

  async function serveTls(): Promise<string> {
    const links = linkServer();
    const server = createServer({ key: pem('loopback-key'), cert: pem('loopback-cert') });
    servers.push(server);
    server.on('upgrade', (request, socket, head) => {
      links.upgrade(request, socket, head, (link) =>
        link.onMessage(() => link.close(CLOSE_CODES.normal, '')),
      );
    });
    await new Promise<void>((resolve) => server.listen(0, '127.0.0.1', resolve));
    return `wss://127.0.0.1:${(server.address() as AddressInfo).port}/v1/site`;
  }

  test('a link over wss: with the authority that signed the certificate', async () => {
    const link = await connectLink({ url: await serveTls(), token: 't', ca: pem('loopback-cert') });
    if (!link.ok) throw new Error(link.failure.message);
    const closed = new Promise<number>((resolve) => link.value.onClose(resolve));
    link.value.onMessage(() => undefined);
    link.value.send(hello);
    expect(await closed).toBe(CLOSE_CODES.normal);
  });

  test('no link where nobody vouches for the certificate', async () => {
    expect(await connectLink({ url: await serveTls(), token: 't' })).toMatchObject({
      ok: false,
      failure: { code: 'certificate-untrusted', message: expect.stringContaining('self-signed certificate') },
    });
  });

  test('no link where the authority is no certificate', async () => {
    expect(await connectLink({ url: await serveTls(), token: 't', ca: 'not a certificate' })).toMatchObject({
      ok: false,
      failure: { code: 'certificate-untrusted' },
    });
  });
});
