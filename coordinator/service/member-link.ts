import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { numbersOfWork } from '../../protocol/numbers.js';
import {
  type ConnectionMemory,
  EMPTY_MEMORY,
  rememberAnswered,
  rememberSent,
  slimWorks,
} from '../panel/slim-ask.js';
import type { AcceptedRun, LinkedMember } from './host-parts.js';

/** One connection of one member in one run: what it was told, and what later asks may leave out. */
export class MemberLink {
  private prepared: 'no' | 'without scaling' | 'with scaling' = 'no';
  private memory: ConnectionMemory = EMPTY_MEMORY;
  private last: { readonly ask: number; readonly works: readonly Work[] } | null = null;

  constructor(
    readonly linked: LinkedMember,
    private readonly accepted: AcceptedRun,
  ) {}

  /**
   * Sends the ask, preparing the member first where that is due. A repeated ask is the same message as before, unless
   * it is wanted in full. Returns the numbers sent, 0 when the connection did not take it.
   */
  ask(ask: number, works: readonly Work[], scaling: Scaling | null, full: boolean): number {
    if (!this.prepare(scaling)) return 0;
    const repeated = this.last?.ask === ask ? this.last.works : slimWorks(works, this.memory);
    const sent = full ? works : repeated;
    if (!this.linked.send({ kind: 'ask', run: this.accepted.run, ask, work: [...sent] })) return 0;
    this.last = { ask, works: sent };
    this.memory = rememberSent(this.memory, sent);
    return sent.reduce((total, work) => total + numbersOfWork(work), 0);
  }

  answered(ask: number, answers: readonly WorkAnswer[]): void {
    this.memory = rememberAnswered(this.memory, ask, answers);
  }

  /** Tells the member that the run is over, if it ever heard of it. */
  end(outcome: string): void {
    if (this.prepared !== 'no') this.linked.send({ kind: 'run-end', run: this.accepted.run, outcome });
  }

  private prepare(scaling: Scaling | null): boolean {
    const due = scaling === null ? 'without scaling' : 'with scaling';
    if (this.prepared === due || this.prepared === 'with scaling') return true;
    const { run, canonical, digest } = this.accepted;
    const sent = this.linked.send({ kind: 'prepare', run, specification: canonical, digest, scaling });
    if (sent) this.prepared = due;
    return sent;
  }
}
