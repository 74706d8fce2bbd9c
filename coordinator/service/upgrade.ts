import { type IncomingMessage, STATUS_CODES } from 'node:http';
import type { Duplex } from 'node:stream';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { type Failure, fail } from '../../protocol/failure.js';
import { linkServer } from '../../protocol/link/websocket.js';
import { PROBLEM_TYPE, problemOf, problemText } from './problem.js';
import type { SiteHub } from './site-hub.js';
import { bearerOf, type Tokens } from './tokens.js';

export const LINK_PATH = '/v1/site';

/** Upgrades requests of workers: the path, the token and the room are checked before a byte of WebSocket is spoken. */
export function upgradeHandler(hub: SiteHub, tokens: Tokens, linksMost: number) {
  const server = linkServer();
  /** Per open connection: closes its link where its token has been voided or has expired since. */
  const sockets = new Map<Duplex, () => void>();
  const full = fail('coordinator-full', `${linksMost} workers are linked already.`);
  return {
    handle(request: IncomingMessage, socket: Duplex, head: Buffer): void {
      const checked = sockets.size < linksMost ? siteOf(request, tokens) : full;
      if (!checked.ok) {
        refuse(socket, checked.failure);
        return;
      }
      sockets.set(socket, () => {});
      socket.once('close', () => sockets.delete(socket));
      server.upgrade(request, socket, head, (link) => {
        sockets.set(socket, () => {
          const still = siteOf(request, tokens);
          if (!still.ok && still.failure.code === 'token-refused') {
            link.close(CLOSE_CODES.tokenRefused, still.failure.message);
          }
        });
        hub.add(link, checked.value);
      });
    },
    /** Closes the links whose tokens are good no longer. */
    recheck(): void {
      for (const closeIfRefused of sockets.values()) closeIfRefused();
    },
    /** Breaks the connections whose peers do not take part in the closing handshake. */
    breakAll(): void {
      for (const socket of sockets.keys()) socket.destroy();
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
