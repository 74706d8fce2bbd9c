/** How both sides come to a link over WebSocket (RFC 6455): the upgrade at the coordinator, the worker's connection. */
import type { IncomingMessage } from 'node:http';
import type { Duplex } from 'node:stream';
import { WebSocket, WebSocketServer } from 'ws';
import { decodeToCoordinator, decodeToWorker } from '../codec.js';
import type { Checked } from '../failure.js';
import { fail, succeed } from '../failure.js';
import { LIMITS } from '../limits.js';
import type { ToCoordinator } from '../messages/to-coordinator.js';
import type { ToWorker } from '../messages/to-worker.js';
import { SUBPROTOCOL } from '../version.js';
import { untrustedReason } from './certificate.js';
import type { KeyPair } from './key-pair.js';
import type { Link } from './link.js';
import { noCommonVersion, refusedUpgrade } from './refused-upgrade.js';
import { PULSE, type Pulse, websocketLink } from './websocket-link.js';

/** Doubles do not compress, and compressing them costs more time than sending them. */
const SOCKET_OPTIONS = {
  maxPayload: LIMITS.frameBytesMost,
  perMessageDeflate: false,
  closeTimeout: LIMITS.closeDeadlineMs,
} as const;

/** The coordinator's half of the upgrade. Authorisation comes before it and is not its business. */
export interface LinkServer {
  /** Upgrades one request. A peer that does not offer our subprotocol gets HTTP 426, and `accept` is not called. */
  upgrade(
    request: IncomingMessage,
    socket: Duplex,
    head: Buffer,
    accept: (link: Link<ToWorker, ToCoordinator>) => void,
  ): void;
}

export function linkServer(pulse: Pulse = PULSE): LinkServer {
  const server = new WebSocketServer({
    noServer: true,
    clientTracking: false,
    ...SOCKET_OPTIONS,
    handleProtocols: () => SUBPROTOCOL,
  });
  return {
    upgrade(request, socket, head, accept) {
      const offered = (request.headers['sec-websocket-protocol'] ?? '').split(',').map((name) => name.trim());
      if (offered.includes(SUBPROTOCOL)) {
        server.handleUpgrade(request, socket, head, (opened) => {
          accept(websocketLink(opened, decodeToCoordinator, bytesReadOf(socket), pulse));
        });
        return;
      }
      // Whether the refused peer still reads it does not matter.
      socket.once('error', () => socket.destroy());
      socket.once('finish', () => socket.destroy());
      socket.end(
        'HTTP/1.1 426 Upgrade Required\r\nConnection: close\r\nUpgrade: websocket\r\n' +
          `Sec-WebSocket-Protocol: ${SUBPROTOCOL}\r\nContent-Length: 0\r\n\r\n`,
      );
    },
  };
}

export interface LinkOptions {
  /** ws: or wss:. */
  readonly url: string;
  /** Goes into the Authorization header of the upgrade (RFC 6750, section 2.1). */
  readonly token: string;
  /** PEM text of the authority to trust instead of the system's. */
  readonly ca?: string;
  /** What this worker shows a coordinator that asks for a certificate. */
  readonly pair?: KeyPair;
  readonly pulse?: Pulse;
}

/**
 * A worker's link to its coordinator. Codes: `token-refused`, `certificate-refused` (HTTP 401, 403),
 * `version-unsupported` (no common subprotocol), `certificate-untrusted`, `link-lost` (anything else).
 */
export function connectLink(options: LinkOptions): Promise<Checked<Link<ToCoordinator, ToWorker>>> {
  return new Promise((resolve) => {
    const attempt = startSocket(options);
    if (!attempt.ok) {
      resolve(attempt);
      return;
    }
    const socket = attempt.value;
    let agreed = true;
    let bytesRead = (): number => 0;
    socket.once('upgrade', (response) => {
      bytesRead = bytesReadOf(response.socket);
      agreed = response.headers['sec-websocket-protocol'] === SUBPROTOCOL;
    });
    socket.once('unexpected-response', (request, response) => {
      void refusedUpgrade(response).then((refused) => {
        resolve(refused);
        request.destroy();
      });
    });
    socket.on('error', (error: NodeJS.ErrnoException) => {
      resolve(agreed ? notLinked(options.url, error) : noCommonVersion());
    });
    socket.once('open', () => {
      resolve(succeed(websocketLink(socket, decodeToWorker, bytesRead, options.pulse)));
    });
  });
}

/** Counts what a connection brings from now on: to be called before its next turn. */
function bytesReadOf(connection: Duplex): () => number {
  let bytes = 0;
  connection.on('data', (piece: Uint8Array) => {
    bytes += piece.length;
  });
  return () => bytes;
}

function startSocket(options: LinkOptions): Checked<WebSocket> {
  try {
    const socket = new WebSocket(options.url, [SUBPROTOCOL], {
      ...SOCKET_OPTIONS,
      headers: { authorization: `Bearer ${options.token}` },
      handshakeTimeout: LIMITS.helloDeadlineMs,
      ...(options.ca === undefined ? {} : { ca: options.ca }),
      ...options.pair,
    });
    return succeed(socket);
  } catch (error) {
    const reason = error instanceof Error ? reasonOf(error) : String(error);
    return fail('link-lost', `No link to ${options.url}: ${reason}.`, {
      remedy: 'Check the address, the token file and the file of the certificate authority.',
    });
  }
}

function notLinked(url: string, error: NodeJS.ErrnoException): Checked<never> {
  const untrusted = untrustedReason(error);
  if (untrusted === null) return fail('link-lost', `No link to ${url}: ${reasonOf(error)}.`);
  return fail('certificate-untrusted', `The certificate of ${url} is not trusted: ${untrusted}.`, {
    remedy: 'Name the certificate of its authority as `ca-file`, or have the analyst renew the certificate.',
  });
}

/** Some connection errors of Node carry a code and no message. */
function reasonOf(error: NodeJS.ErrnoException): string {
  return error.message === '' ? (error.code ?? error.name) : error.message;
}
