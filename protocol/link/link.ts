/**
 * A two-way, ordered link that carries whole messages. Two implementations: a memory link (tests, simulation) and a
 * WebSocket link. Messages are encoded and decoded on both, so that a memory link tests the codec too.
 */
export interface Link<Outgoing, Incoming> {
  /** Queues one message. Returns false when the link is closed or its bounded send buffer is full. */
  send(message: Outgoing): boolean;
  /** Called for every message, in order. Set once; nothing is read from the link before. */
  onMessage(handler: (message: Incoming) => void): void;
  /** Called once, when the link is closed by either side; `code` is a close code. */
  onClose(handler: (code: number, reason: string) => void): void;
  close(code: number, reason: string): void;
  readonly open: boolean;
  /** Payload bytes sent and received so far. */
  readonly bytesSent: number;
  readonly bytesReceived: number;
  /** Payload bytes that were taken by `send` and have not gone out. */
  readonly bytesWaiting: number;
}
