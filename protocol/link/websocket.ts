/** Links over WebSocket (RFC 6455), binary frames only. The one file that knows the socket library. */
import type { IncomingMessage } from 'node:http';
import type { Duplex } from 'node:stream';
import { WebSocket, WebSocketServer } from 'ws';
import { CLOSE_CODES } from '../close-codes.js';
import { decodeToCoordinator, decodeToWorker, encodeMessage } from '../codec.js';
import type { Checked } from '../failure.js';
import { fail, succeed } from '../failure.js';
import { LIMITS } from '../limits.js';
import type { ToCoordinator } from '../messages/to-coordinator.js';
import type { ToWorker } from '../messages/to-worker.js';
import { SUBPROTOCOL } from '../version.js';
import { untrustedReason } from './certificate.js';
import { closeCodeOf, closeReason } from './ending.js';
import type { Link } from './link.js';

/** Doubles do not compress, and compressing them costs more time than sending them. */
const SOCKET_OPTIONS = { maxPayload: LIMITS.frameBytesMost, perMessageDeflate: false } as const;

const SILENT_PINGS_MOST = Math.ceil(LIMITS.silenceMostMs / LIMITS.pingEveryMs);

/**
 * A link over an open socket, for either end. Call it in the same turn in which the socket opened: nothing is read
 * until `onMessage` is set. A frame that cannot be decoded closes the link with the code that says why.
 */
export function websocketLink<Outgoing extends ToWorker | ToCoordinator, Incoming>(
  socket: WebSocket,
  decode: (bytes: Uint8Array) => Checked<Incoming>,
): Link<Outgoing, Incoming> {
  return new WebSocketLink<Outgoing, Incoming>(socket, decode);
}

class WebSocketLink<Outgoing extends ToWorker | ToCoordinator, Incoming> implements Link<Outgoing, Incoming> {
  bytesSent = 0;
  bytesReceived = 0;
  private ending: { readonly code: number; readonly reason: string } | null = null;
  private messageHandler: ((message: Incoming) => void) | null = null;
  private closeHandler: ((code: number, reason: string) => void) | null = null;
  private readonly pulse: NodeJS.Timeout;
  private silentPings = 0;

  constructor(
    private readonly socket: WebSocket,
    private readonly decode: (bytes: Uint8Array) => Checked<Incoming>,
  ) {
    socket.binaryType = 'nodebuffer';
    socket.pause();
    this.pulse = setInterval(() => this.ping(), LIMITS.pingEveryMs);
    this.pulse.unref();
    socket.on('message', (data, isBinary) => this.receive(data, isBinary));
    socket.on('ping', () => this.heard());
    socket.on('pong', () => this.heard());
    socket.on('error', (error) => this.broken(error));
    socket.on('close', (code, reason) => this.closed(code, reason.toString()));
  }

  get open(): boolean {
    return this.ending === null && this.socket.readyState === WebSocket.OPEN;
  }

  send(message: Outgoing): boolean {
    if (!this.open) return false;
    const frame = encodeMessage(message);
    if (frame.length > LIMITS.frameBytesMost) {
      this.close(CLOSE_CODES.frameTooLarge, `a message of ${frame.length} bytes was to be sent`);
      return false;
    }
    if (this.socket.bufferedAmount + frame.length > LIMITS.sendBufferBytesMost) return false;
    this.bytesSent += frame.length;
    this.socket.send(frame, { binary: true });
    return true;
  }

  onMessage(handler: (message: Incoming) => void): void {
    this.messageHandler = handler;
    this.socket.resume();
  }

  onClose(handler: (code: number, reason: string) => void): void {
    this.closeHandler = handler;
  }

  close(code: number, reason: string): void {
    if (!this.open) return;
    this.ending = { code, reason: closeReason(reason) };
    this.socket.close(code, this.ending.reason);
    // The peer's half of the closing handshake is read even where no message ever was.
    this.socket.resume();
  }

  private receive(data: unknown, isBinary: boolean): void {
    if (!this.open || this.messageHandler === null) return;
    this.heard();
    if (!isBinary || !(data instanceof Uint8Array)) {
      this.close(CLOSE_CODES.frameMalformed, 'A text frame; messages are binary frames.');
      return;
    }
    this.bytesReceived += data.length;
    const message = this.decode(data);
    if (message.ok) this.messageHandler(message.value);
    else this.close(closeCodeOf(message.failure), message.failure.message);
  }

  private heard(): void {
    this.silentPings = 0;
  }

  /**
   * Silence is counted in pings of this side, not in time: while a long computation holds this process, no answer can
   * be read, and that is no silence of the peer.
   */
  private ping(): void {
    if (!this.open) return;
    if (this.silentPings >= SILENT_PINGS_MOST) {
      this.ending = {
        code: CLOSE_CODES.tooSlow,
        reason: `nothing heard for ${LIMITS.silenceMostMs / 1000} seconds`,
      };
      this.socket.terminate();
      return;
    }
    this.silentPings++;
    this.socket.ping();
  }

  /** The socket breaks the connection itself after an error; this only keeps the reason for `onClose`. */
  private broken(error: Error): void {
    if (this.ending !== null) return;
    const errorCode = 'code' in error ? error.code : undefined;
    const tooLarge = errorCode === 'WS_ERR_UNSUPPORTED_MESSAGE_LENGTH';
    const code = tooLarge ? CLOSE_CODES.frameTooLarge : CLOSE_CODES.connectionLost;
    this.ending = { code, reason: closeReason(error.message) };
  }

  private closed(code: number, reason: string): void {
    clearInterval(this.pulse);
    const ending = this.ending ?? { code, reason };
    this.ending = ending;
    this.closeHandler?.(ending.code, ending.reason);
  }
}

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

export function linkServer(): LinkServer {
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
          accept(websocketLink<ToWorker, ToCoordinator>(opened, decodeToCoordinator));
        });
        return;
      }
      // Whether the refused peer still reads it does not matter.
      socket.once('error', () => socket.destroy());
      socket.end(
        'HTTP/1.1 426 Upgrade Required\r\nConnection: close\r\nUpgrade: websocket\r\n' +
          `Sec-WebSocket-Protocol: ${SUBPROTOCOL}\r\nContent-Length: 0\r\n\r\n`,
      );
    },
  };
}

/**
 * A worker's link to its coordinator. `url` is ws: or wss:, `token` goes into the Authorization header of the upgrade
 * (RFC 6750, section 2.1), `ca` is the PEM text of the authority to trust instead of the system's. Codes:
 * `token-refused` (HTTP 401, 403), `version-unsupported` (no common subprotocol), `certificate-untrusted`, `link-lost`
 * (anything else).
 */
export function connectLink(options: {
  url: string;
  token: string;
  ca?: string;
}): Promise<Checked<Link<ToCoordinator, ToWorker>>> {
  return new Promise((resolve) => {
    const attempt = startSocket(options);
    if (!attempt.ok) {
      resolve(attempt);
      return;
    }
    const socket = attempt.value;
    let agreed = true;
    socket.once('upgrade', (response) => {
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
      resolve(succeed(websocketLink<ToCoordinator, ToWorker>(socket, decodeToWorker)));
    });
  });
}

function startSocket(options: { url: string; token: string; ca?: string }): Checked<WebSocket> {
  try {
    const socket = new WebSocket(options.url, [SUBPROTOCOL], {
      ...SOCKET_OPTIONS,
      headers: { authorization: `Bearer ${options.token}` },
      handshakeTimeout: LIMITS.helloDeadlineMs,
      ...(options.ca === undefined ? {} : { ca: options.ca }),
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

async function refusedUpgrade(response: IncomingMessage): Promise<Checked<never>> {
  const status = response.statusCode ?? 0;
  if (status === 401 || status === 403) {
    const said = await problemDetail(response);
    if (said !== null) return fail('token-refused', `The coordinator refused the token: ${said}`);
    return fail('token-refused', `The coordinator refused the token (HTTP ${status}).`, {
      remedy: 'Ask the analyst for a token of this site.',
    });
  }
  if (status === 426) return noCommonVersion();
  return fail('link-lost', `The address answered with HTTP ${status} instead of a link.`);
}

/** More than a coordinator's problem details take. */
const PROBLEM_BYTES_MOST = 4096;

/** The `detail` of a problem (RFC 9457), fit to be shown on a terminal; null where the reply is none. */
async function problemDetail(response: IncomingMessage): Promise<string | null> {
  let body = '';
  try {
    for await (const piece of response) {
      body += String(piece);
      if (body.length > PROBLEM_BYTES_MOST) return null;
    }
    const { detail } = JSON.parse(body) as { detail?: unknown };
    return typeof detail === 'string' && /^[\P{C}]{1,500}$/u.test(detail) ? detail : null;
  } catch {
    // A reply that breaks off or is no JSON says nothing; the status has said that the token is refused.
    return null;
  }
}

function noCommonVersion(): Checked<never> {
  return fail('version-unsupported', `The coordinator does not speak ${SUBPROTOCOL}.`, {
    remedy: 'Run the same release of commonfit on both sides.',
  });
}

/** Some connection errors of Node carry a code and no message. */
function reasonOf(error: NodeJS.ErrnoException): string {
  return error.message === '' ? (error.code ?? error.name) : error.message;
}
