import { CLOSE_CODES } from '../close-codes.js';
import { decodeToCoordinator, decodeToWorker, encodeMessage } from '../codec.js';
import type { Checked } from '../failure.js';
import { LIMITS } from '../limits.js';
import type { ToCoordinator } from '../messages/to-coordinator.js';
import type { ToWorker } from '../messages/to-worker.js';
import { closeCodeOf, closeReason } from './ending.js';
import type { Link } from './link.js';

type Parcel = { readonly frame: Uint8Array } | { readonly code: number; readonly reason: string };

/**
 * Two ends of one link without a socket. Every message is encoded when sent and decoded when delivered. `deliver`
 * schedules each delivery (a microtask, a simulated delay); messages of one direction stay in order even where it
 * runs what it was given in another order.
 */
export function memoryLinks(deliver: (run: () => void) => void): {
  coordinator: Link<ToWorker, ToCoordinator>;
  worker: Link<ToCoordinator, ToWorker>;
} {
  const coordinator = new MemoryEnd<ToWorker, ToCoordinator>(deliver, decodeToCoordinator);
  const worker = new MemoryEnd<ToCoordinator, ToWorker>(deliver, decodeToWorker);
  coordinator.peer = worker;
  worker.peer = coordinator;
  return { coordinator, worker };
}

class MemoryEnd<Outgoing extends ToWorker | ToCoordinator, Incoming> implements Link<Outgoing, Incoming> {
  peer: { take(): void; handOver(): Parcel | undefined } | null = null;
  open = true;
  bytesSent = 0;
  bytesReceived = 0;
  bytesWaiting = 0;
  private readonly outbox: Parcel[] = [];
  /** Deliveries that came before `onMessage`: they wait at the sender, as on a socket that is not read. */
  private heldDeliveries = 0;
  private messageHandler: ((message: Incoming) => void) | null = null;
  private closeHandler: ((code: number, reason: string) => void) | null = null;

  constructor(
    private readonly deliver: (run: () => void) => void,
    private readonly decode: (bytes: Uint8Array) => Checked<Incoming>,
  ) {}

  send(message: Outgoing): boolean {
    if (!this.open) return false;
    const frame = encodeMessage(message);
    if (frame.length > LIMITS.frameBytesMost) {
      this.close(CLOSE_CODES.frameTooLarge, `a message of ${frame.length} bytes was to be sent`);
      return false;
    }
    if (this.bytesWaiting + frame.length > LIMITS.sendBufferBytesMost) return false;
    this.bytesSent += frame.length;
    this.bytesWaiting += frame.length;
    this.dispatch({ frame });
    return true;
  }

  onMessage(handler: (message: Incoming) => void): void {
    this.messageHandler = handler;
    for (; this.heldDeliveries > 0; this.heldDeliveries--) this.deliver(() => this.take());
  }

  onClose(handler: (code: number, reason: string) => void): void {
    this.closeHandler = handler;
  }

  close(code: number, reason: string): void {
    if (!this.open) return;
    const ending = { code, reason: closeReason(reason) };
    this.open = false;
    this.dispatch(ending);
    this.deliver(() => this.closeHandler?.(ending.code, ending.reason));
  }

  /** The next parcel of the peer, which is owed one. */
  take(): void {
    if (!this.open) return;
    if (this.messageHandler === null) {
      this.heldDeliveries++;
      return;
    }
    const parcel = this.peer?.handOver();
    if (parcel === undefined) return;
    if ('code' in parcel) {
      this.open = false;
      this.closeHandler?.(parcel.code, parcel.reason);
      return;
    }
    this.bytesReceived += parcel.frame.length;
    const message = this.decode(parcel.frame);
    if (message.ok) this.messageHandler(message.value);
    else this.close(closeCodeOf(message.failure), message.failure.message);
  }

  handOver(): Parcel | undefined {
    const parcel = this.outbox.shift();
    if (parcel !== undefined && 'frame' in parcel) this.bytesWaiting -= parcel.frame.length;
    return parcel;
  }

  private dispatch(parcel: Parcel): void {
    this.outbox.push(parcel);
    this.deliver(() => this.peer?.take());
  }
}
