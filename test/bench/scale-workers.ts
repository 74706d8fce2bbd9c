import { once } from 'node:events';
import { WebSocket } from 'ws';
import { LIMITS } from '../../protocol/limits.js';
import type { Link } from '../../protocol/link/link.js';
import { connectLink } from '../../protocol/link/websocket.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { PROTOCOL_VERSION, SOFTWARE } from '../../protocol/version.js';
import { must } from '../support/method-driver.js';
import { LightSite } from './scale-light.js';
import { SITE } from './scale-specification.js';

/** What the process that measures tells this one, in turn; each is answered with `done`. */
export type WorkersOrder =
  | {
      readonly do: 'link';
      readonly address: string;
      readonly token: string;
      readonly siteCount: number;
      readonly specification: string;
    }
  /** Sends every frame back as it came. */
  | { readonly do: 'echo'; readonly url: string; readonly siteCount: number };

/** Links opened at once: a listening socket holds no more. */
const OPENING_MOST = 50;

process.on('message', (order: WorkersOrder) => {
  void (order.do === 'link' ? link(order) : echo(order)).then(() => process.send?.('done'));
});
process.on('disconnect', () => process.exit());

async function link({
  address,
  token,
  siteCount,
  specification,
}: Extract<WorkersOrder, { do: 'link' }>): Promise<void> {
  const parsed = parseFitSpecification(specification, 'scale.fit.yaml');
  if (!parsed.ok) throw new Error('the specification of the benchmark is not valid');
  const columns = designColumns(parsed.value).map(({ name }) => name);
  await inTurns(siteCount, async (index) => {
    const site = new LightSite(columns, siteCount, index);
    const opened = must(await connectLink({ url: `${address.replace('http', 'ws')}/v1/site`, token }));
    opened.onMessage((message) => receive(opened, site, message));
    opened.send({
      kind: 'hello',
      version: PROTOCOL_VERSION,
      site: SITE,
      shard: { index: index + 1, of: siteCount },
      software: SOFTWARE,
      kernel: 'light',
    });
  });
}

function receive(opened: Link<ToCoordinator, ToWorker>, site: LightSite, message: ToWorker): void {
  if (message.kind !== 'ask') return;
  const { run, ask, work } = message;
  opened.send({ kind: 'answer', run, ask, work: work.map((one) => site.answer(one)) });
}

const echo = ({ url, siteCount }: Extract<WorkersOrder, { do: 'echo' }>): Promise<void> =>
  inTurns(siteCount, async () => {
    const options = { perMessageDeflate: false, maxPayload: LIMITS.frameBytesMost } as const;
    const socket = new WebSocket(url, options);
    socket.on('message', (data) => socket.send(data));
    await once(socket, 'open');
  });

async function inTurns(count: number, task: (index: number) => Promise<void>): Promise<void> {
  for (let from = 0; from < count; from += OPENING_MOST) {
    const some = Array.from({ length: Math.min(OPENING_MOST, count - from) }, (_, k) => task(from + k));
    await Promise.all(some);
  }
}
