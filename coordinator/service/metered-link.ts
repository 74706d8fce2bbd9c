import { CLOSE_CODES } from '../../protocol/close-codes.js';
import type { Link } from '../../protocol/link/link.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';

/** Answers and refusals that may come on one link beyond the asks that went out on it. */
export const REPLIES_SPARE = 100;

/**
 * A link whose peer cannot flood it: an honest worker replies once to each ask it got on this link. One that replies
 * more often, by more than the spare, is closed as `messageUnexpected`; what a flood would cost is bounded without a clock.
 */
export class MeteredLink implements Link<ToWorker, ToCoordinator> {
  private repliesLeft = REPLIES_SPARE;

  constructor(private readonly link: Link<ToWorker, ToCoordinator>) {}

  get open(): boolean {
    return this.link.open;
  }

  get bytesSent(): number {
    return this.link.bytesSent;
  }

  get bytesReceived(): number {
    return this.link.bytesReceived;
  }

  get bytesWaiting(): number {
    return this.link.bytesWaiting;
  }

  send(message: ToWorker): boolean {
    const sent = this.link.send(message);
    if (sent && message.kind === 'ask') this.repliesLeft += 1;
    return sent;
  }

  onMessage(handler: (message: ToCoordinator) => void): void {
    this.link.onMessage((message) => {
      if (message.kind !== 'hello') this.repliesLeft -= 1;
      if (this.repliesLeft >= 0) handler(message);
      else this.link.close(CLOSE_CODES.messageUnexpected, 'more answers than were asked for');
    });
  }

  onClose(handler: (code: number, reason: string) => void): void {
    this.link.onClose(handler);
  }

  close(code: number, reason: string): void {
    this.link.close(code, reason);
  }
}
