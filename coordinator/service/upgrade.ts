import type { IncomingMessage } from 'node:http';
import type { Duplex } from 'node:stream';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { fail } from '../../protocol/failure.js';
import { linkServer } from '../../protocol/link/websocket.js';
import type { Pulse } from '../../protocol/link/websocket-link.js';
import type { Connections } from './connections.js';
import type { Doorkeeper, Let } from './doorkeeper.js';
import { MeteredLink } from './metered-link.js';
import { type Problem, problemOf, problemReply } from './problem.js';
import type { ServiceSettings } from './settings.js';
import type { SiteHub } from './site-hub.js';

export const LINK_PATH = '/v1/site';

export interface UpgradeParts {
  readonly hub: SiteHub;
  readonly doorkeeper: Doorkeeper;
  readonly connections: Connections;
  readonly settings: Pick<ServiceSettings, 'linksMost' | 'linksPerSiteMost'>;
  readonly pulse?: Pulse;
}

interface LinkPlace {
  readonly site: string;
  /** Closes the link where its token has been voided or has expired since, or its certificate. */
  recheck(): void;
}

/** Upgrades requests of workers: the path, the token and the room are checked before a byte of WebSocket is spoken. */
export function upgradeHandler({ hub, doorkeeper, connections, settings, pulse }: UpgradeParts) {
  const server = linkServer(pulse);
  const places = new Map<Duplex, LinkPlace>();

  const letIn = (request: IncomingMessage): Let<string> => {
    const path = (request.url ?? '/').split('?', 1)[0];
    if (path !== LINK_PATH) {
      const { failure } = fail('not-found', `Workers link at ${LINK_PATH} only.`);
      return doorkeeper.refuse(request, failure);
    }
    const site = doorkeeper.site(request);
    return site.ok ? (full(places, site.value, settings) ?? site) : site;
  };

  return {
    handle(request: IncomingMessage, socket: Duplex, head: Buffer): void {
      const site = letIn(request);
      if (!site.ok) {
        refuse(socket, site.problem);
        return;
      }
      places.set(socket, { site: site.value, recheck: () => {} });
      socket.once('close', () => places.delete(socket));
      server.upgrade(request, socket, head, (link) => {
        connections.linked(socket);
        const recheck = (): void => {
          const refused = doorkeeper.stillRefused(request);
          const code = refused === null ? undefined : CLOSING[refused.code];
          if (refused !== null && code !== undefined) link.close(code, refused.message);
        };
        places.set(socket, { site: site.value, recheck });
        hub.add(new MeteredLink(link), site.value);
      });
    },
    /** Closes the links whose tokens or certificates are good no longer. */
    recheck(): void {
      for (const place of places.values()) place.recheck();
    },
    /** Breaks the connections whose peers do not take part in the closing handshake. */
    breakAll(): void {
      for (const socket of places.keys()) socket.destroy();
    },
  };
}

/** What closes an open link; a token file that cannot be read at the moment does not. */
const CLOSING: Partial<Record<string, number>> = {
  'token-refused': CLOSE_CODES.tokenRefused,
  'certificate-refused': CLOSE_CODES.certificateRefused,
};

function full(
  places: ReadonlyMap<Duplex, LinkPlace>,
  site: string,
  { linksMost, linksPerSiteMost }: UpgradeParts['settings'],
): Let<never> | null {
  const refused = (found: string): Let<never> => ({
    ok: false,
    problem: problemOf(fail('coordinator-full', found).failure),
  });
  if (places.size >= linksMost) return refused(`${linksMost} workers are linked already.`);
  let ofSite = 0;
  for (const place of places.values()) if (place.site === site) ofSite += 1;
  return ofSite < linksPerSiteMost
    ? null
    : refused(`${linksPerSiteMost} workers of ${site} are linked already.`);
}

function refuse(socket: Duplex, problem: Problem): void {
  // Whether the refused peer still reads it does not matter; nor does the connection wait for it to end its half.
  socket.once('error', () => socket.destroy());
  socket.once('finish', () => socket.destroy());
  socket.end(problemReply(problem));
}
