import { WebSocket } from 'ws';
import { decodeToWorker, encodeMessage } from '../../protocol/codec.js';
import type { Answer, Ask } from '../../protocol/messages/round.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { PROTOCOL_VERSION, SUBPROTOCOL } from '../../protocol/version.js';
import { toyAnswer } from './toy-run.js';

export const helloOf = (site: string) =>
  ({
    kind: 'hello',
    version: PROTOCOL_VERSION,
    site,
    shard: { index: 1, of: 1 },
    software: 'toy',
    kernel: 'k',
  }) as const;

/** A socket at a coordinator, spoken to frame by frame: what is sent need not be a message. */
export class ToySocket {
  readonly received: ToWorker[] = [];
  readonly closed: Promise<number>;
  private onMessage: (message: ToWorker) => void = () => {};

  private constructor(readonly socket: WebSocket) {
    this.closed = new Promise((resolve) => socket.on('close', (code) => resolve(code)));
    socket.on('message', (data: Buffer) => {
      const message = decodeToWorker(data);
      if (!message.ok) throw new Error(message.failure.message);
      this.received.push(message.value);
      this.onMessage(message.value);
    });
  }

  /** The open socket, or the HTTP status and body of a refused upgrade. */
  static open(
    address: string,
    token: string,
    subprotocol = SUBPROTOCOL,
  ): Promise<ToySocket | { status: number; type: string; body: string }> {
    const url = `${address.replace(/^http/, 'ws')}/v1/site`;
    const socket = new WebSocket(url, [subprotocol], { headers: { authorization: `Bearer ${token}` } });
    return new Promise((resolve, reject) => {
      const opened = new ToySocket(socket);
      socket.once('open', () => resolve(opened));
      socket.once('error', reject);
      socket.once('unexpected-response', async (_, response) => {
        let body = '';
        for await (const piece of response) body += String(piece);
        resolve({ status: response.statusCode ?? 0, type: response.headers['content-type'] ?? '', body });
      });
    });
  }

  send(message: Parameters<typeof encodeMessage>[0]): void {
    this.socket.send(encodeMessage(message));
  }

  /** Answers asks from now on, each with what `reply` makes of it. */
  answerWith(reply: (ask: Ask) => Answer | null): void {
    this.onMessage = (message) => {
      const answer = message.kind === 'ask' ? reply(message) : null;
      if (answer !== null) this.send(answer);
    };
    for (const message of this.received) this.onMessage(message);
  }
}

/** A greeted, honest toy site with this mean. */
export async function toySite(
  address: string,
  token: string,
  site: string,
  mean: number,
): Promise<ToySocket> {
  const opened = await ToySocket.open(address, token);
  if (!(opened instanceof ToySocket)) throw new Error(`refused with ${opened.status}`);
  opened.answerWith((ask) => toyAnswer(ask, mean));
  opened.send(helloOf(site));
  return opened;
}
