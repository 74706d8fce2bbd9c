import { openJournal } from '../../coordinator/journal/journal.js';
import { type MemoryStore, memoryStore } from '../../coordinator/journal/memory-store.js';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { RunEnd } from '../../coordinator/run/run.js';
import type { LinkedMember, Notice } from '../../coordinator/service/host-parts.js';
import { loggedIn } from '../../coordinator/service/run-entry.js';
import { RunHost } from '../../coordinator/service/run-host.js';
import type { Answer, Ask, Refusal } from '../../protocol/messages/round.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { toyAnswer, toyRun, toySpecification } from './toy-run.js';
import { VirtualTime } from './virtual-time.js';

export const MEANS: Record<string, number> = { harrowmere: 3.1, 'lindell-bay': 0.7, castlefen: -2.2 };
export const SITES = Object.keys(MEANS);
const ACCEPTED = { run: 'r1', canonical: '{}', digest: 'd'.repeat(64), startFrom: null };

export type Replies = (ask: Ask, site: string) => readonly (Answer | Refusal)[];
export const honest: Replies = (ask, site) => [toyAnswer(ask, MEANS[site])];

/** One run host with toy sites, all in virtual time. */
export class Bench {
  readonly events: LogEvent[] = [];
  readonly notices: Notice[] = [];
  readonly sent: { site: string; message: ToWorker }[] = [];
  readonly links = new Map<string, LinkedMember>();
  readonly host: RunHost;
  kept: RunEnd | null = null;
  mayStart = true;

  readonly time = new VirtualTime();

  constructor(
    readonly store: MemoryStore = memoryStore(),
    private readonly replies: Replies = honest,
    more: {
      logged?: readonly LogEvent[];
      sites?: FitSpecification['sites'];
      specification?: FitSpecification;
      run?: typeof toyRun;
    } = {},
  ) {
    const { logged = [], sites = SITES, run = toyRun } = more;
    const specification = more.specification ?? toySpecification(sites);
    this.host = new RunHost({
      accepted: { ...ACCEPTED, specification },
      start: (roster) => run(specification, ACCEPTED.digest, roster),
      journal: openJournal(store),
      time: this.time,
      connected: () => [...this.links.values()],
      mayStart: () => this.mayStart,
      log: (event) => this.events.push(event),
      notice: (notice) => this.notices.push(notice),
      keepResult: async (end) => {
        this.kept = end;
        return { ok: true, value: 'folder' };
      },
      logged: loggedIn(logged),
      node: 'v20',
    });
  }

  connect(site: string, delayMs = 10): LinkedMember {
    const linked: LinkedMember = {
      member: { site, shard: { index: 1, of: 1 }, kernel: 'k' },
      send: (message) => {
        this.sent.push({ site, message });
        if (message.kind !== 'ask') return true;
        for (const reply of this.replies(message, site)) {
          this.time.after(delayMs, () => this.host.receive(linked, reply));
        }
        return true;
      },
      close: () => this.drop(site),
    };
    this.links.set(site, linked);
    this.host.connected(linked);
    return linked;
  }

  drop(site: string): void {
    const linked = this.links.get(site);
    this.links.delete(site);
    if (linked !== undefined) this.host.lost(linked);
  }

  async finish(): Promise<RunEnd> {
    await this.time.pass(60_000, () => this.host.state.state === 'ended');
    if (this.kept === null) throw new Error(`the run has not ended: ${JSON.stringify(this.host.state)}`);
    return this.kept;
  }

  named<K extends LogEvent['event']>(event: K): Extract<LogEvent, { event: K }>[] {
    return this.events.filter((one): one is Extract<LogEvent, { event: K }> => one.event === event);
  }
}

export async function undisturbed(): Promise<Bench> {
  const bench = new Bench();
  void bench.host.open();
  for (const site of SITES) bench.connect(site);
  await bench.finish();
  return bench;
}
