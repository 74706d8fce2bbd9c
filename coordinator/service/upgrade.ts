import { type IncomingMessage, STATUS_CODES } from 'node:http';
import type { Duplex } from 'node:stream';
import { type Failure, fail } from '../../protocol/failure.js';
import { linkServer } from '../../protocol/link/websocket.js';
import { PROBLEM_TYPE, problemOf, problemText } from './problem.js';
import type { SiteHub } from './site-hub.js';
import { bearerOf, type Tokens } from './tokens.js';

export const LINK_PATH = '/v1/site';

/** Upgrades requests of workers: the path, the token and the room are checked before a byte of WebSocket is spoken. */
export function upgradeHandler(hub: SiteHub, tokens: Tokens, linksMost: number) {
  const server = linkServer();
  const sockets = new Set<Duplex>();
  const full = fail('coordinator-full', `${linksMost} workers are linked already.`);
  return {
    handle(request: IncomingMessage, socket: Duplex, head: Buffer): void {
      const checked = sockets.size < linksMost ? siteOf(request, tokens) : full;
      if (!checked.ok) {
        refuse(socket, checked.failure);
        return;
      }
      sockets.add(socket);
      socket.once('close', () => sockets.delete(socket));
      server.upgrade(request, socket, head, (link) => hub.add(link, checked.value));
    },
    /** Breaks the connections whose peers do not take part in the closing handshake. */
    breakAll(): void {
      for (const socket of sockets) socket.destroy();
    },
  };
}

function siteOf(request: IncomingMessage, tokens: Tokens) {
  const { pathname } = new URL(request.url ?? '/', 'http://coordinator');
  if (pathname !== LINK_PATH) return fail('not-found', `Workers link at ${LINK_PATH}, not at ${pathname}.`);
  const token = bearerOf(request.headers.authorization);
  const holder = token === null ? null : tokens.holderOf(token);
  if (holder !== null && !holder.ok) return holder;
  if (holder?.value?.kind === 'site') return { ok: true, value: holder.value.name } as const;
  return fail('token-refused', 'The token is missing, unknown or not one of a site.', {
    remedy: 'Ask the analyst for a token of this site.',
  });
}

function refuse(socket: Duplex, failure: Failure): void {
  const problem = problemOf(failure);
  const body = problemText(problem);
  const head = [
    `HTTP/1.1 ${problem.status} ${STATUS_CODES[problem.status] ?? ''}`,
    'Connection: close',
    `Content-Type: ${PROBLEM_TYPE}`,
    `Content-Length: ${Buffer.byteLength(body)}`,
    ...(problem.status === 401 ? ['WWW-Authenticate: Bearer'] : []),
  ];
  // Whether the refused peer still reads it does not matter.
  socket.once('error', () => socket.destroy());
  socket.end(`${head.join('\r\n')}\r\n\r\n${body}`);
}
