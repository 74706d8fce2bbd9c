/** A link over an open WebSocket (RFC 6455), binary frames only. */
import { WebSocket } from 'ws';
import { CLOSE_CODES } from '../close-codes.js';
import { encodeMessage } from '../codec.js';
import type { Checked } from '../failure.js';
import { LIMITS } from '../limits.js';
import type { ToCoordinator } from '../messages/to-coordinator.js';
import type { ToWorker } from '../messages/to-worker.js';
import { closeCodeOf, closeReason } from './ending.js';
import type { Link } from './link.js';
import { UnreadWatch } from './unread.js';

/** How a link finds out that its peer is gone although the connection looks alive. */
export interface Pulse {
  /** Time from one ping to the next. Milliseconds. */
  readonly everyMs: number;
  /** Silence after which the link is given up: at the latest one ping later. Milliseconds. */
  readonly silenceMostMs: number;
}

export const PULSE: Pulse = { everyMs: LIMITS.pingEveryMs, silenceMostMs: LIMITS.silenceMostMs };

/**
 * A link over an open socket, for either end. Call it in the same turn in which the socket opened: nothing is read
 * until `onMessage` is set. A frame that cannot be decoded closes the link with the code that says why. `bytesRead`
 * tells how many bytes the connection has brought so far, those of unfinished frames too.
 */
export function websocketLink<Outgoing extends ToWorker | ToCoordinator, Incoming>(
  socket: WebSocket,
  decode: (bytes: Uint8Array) => Checked<Incoming>,
  bytesRead: () => number,
  pulse: Pulse = PULSE,
): Link<Outgoing, Incoming> {
  return new WebSocketLink<Outgoing, Incoming>(socket, decode, bytesRead, pulse);
}

class WebSocketLink<Outgoing extends ToWorker | ToCoordinator, Incoming> implements Link<Outgoing, Incoming> {
  bytesSent = 0;
  bytesReceived = 0;
  private ending: { readonly code: number; readonly reason: string } | null = null;
  private messageHandler: ((message: Incoming) => void) | null = null;
  private closeHandler: ((code: number, reason: string) => void) | null = null;
  private readonly beat: NodeJS.Timeout;
  private silentPings = 0;
  private bytesHeard = 0;
  private beats = 0;
  private readonly unread: UnreadWatch;

  constructor(
    private readonly socket: WebSocket,
    private readonly decode: (bytes: Uint8Array) => Checked<Incoming>,
    private readonly bytesRead: () => number,
    private readonly pulse: Pulse,
  ) {
    this.unread = new UnreadWatch(pulse.silenceMostMs);
    socket.binaryType = 'nodebuffer';
    socket.pause();
    this.beat = setInterval(() => this.ping(), pulse.everyMs);
    this.beat.unref();
    socket.on('message', (data, isBinary) => this.receive(data, isBinary));
    socket.on('error', (error) => this.broken(error));
    socket.on('close', (code, reason) => this.closed(code, reason.toString()));
  }

  get open(): boolean {
    return this.ending === null && this.socket.readyState === WebSocket.OPEN;
  }

  get bytesWaiting(): number {
    return this.socket.bufferedAmount;
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
    if (!isBinary || !(data instanceof Uint8Array)) {
      this.close(CLOSE_CODES.frameMalformed, 'A text frame; messages are binary frames.');
      return;
    }
    this.bytesReceived += data.length;
    const message = this.decode(data);
    if (message.ok) this.messageHandler(message.value);
    else this.close(closeCodeOf(message.failure), message.failure.message);
  }

  /**
   * Silence is counted in pings of this side, not in time: while a long computation holds this process, no answer can
   * be read, and that is no silence of the peer. Nor is a pong overdue behind a large frame on a slow line: any byte
   * is a sign of life.
   */
  private ping(): void {
    if (!this.open) return;
    const bytes = this.bytesRead();
    if (bytes !== this.bytesHeard) this.silentPings = 0;
    this.bytesHeard = bytes;
    const { everyMs, silenceMostMs } = this.pulse;
    this.beats++;
    if (this.silentPings * everyMs >= silenceMostMs) {
      this.giveUp(`nothing heard for ${silenceMostMs / 1000} seconds`);
    } else if (this.unread.overdue(this.beats * everyMs, this.bytesSent, this.socket.bufferedAmount)) {
      this.giveUp('what was sent is not read');
    } else {
      this.silentPings++;
      this.socket.ping();
    }
  }

  /** Breaks the connection: a peer that is silent or does not read takes no part in a closing handshake. */
  private giveUp(reason: string): void {
    this.ending = { code: CLOSE_CODES.tooSlow, reason };
    this.socket.terminate();
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
    clearInterval(this.beat);
    const ending = this.ending ?? { code, reason };
    this.ending = ending;
    this.closeHandler?.(ending.code, ending.reason);
  }
}
