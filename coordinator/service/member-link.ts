import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { numbersOfWork } from '../../protocol/numbers.js';
import type { Lack } from '../panel/panel-state.js';
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
  /** The scaling it was prepared with last; null: not at all. */
  private prepared: { readonly scaling: Scaling | null } | null = null;
  private memory: ConnectionMemory = EMPTY_MEMORY;
  private last: { readonly ask: number; readonly works: readonly Work[] } | null = null;

  constructor(
    readonly linked: LinkedMember,
    private readonly accepted: AcceptedRun,
  ) {}

  /**
   * Sends the ask, preparing the member first where that is due. A repeated ask is the same message as before, unless
   * the member lacks something. Returns the numbers sent, 0 when the connection did not take it.
   */
  ask(ask: number, works: readonly Work[], scaling: Scaling | null, lacks: Lack): number {
    if (lacks === 'run') this.prepared = null;
    if (!this.prepare(scaling)) return 0;
    const repeated = this.last?.ask === ask ? this.last.works : slimWorks(works, this.memory);
    const sent = lacks === 'nothing' ? repeated : works;
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
    if (this.prepared !== null) this.linked.send({ kind: 'run-end', run: this.accepted.run, outcome });
  }

  private prepare(scaling: Scaling | null): boolean {
    if (this.prepared?.scaling === scaling) return true;
    const { run, canonical, digest } = this.accepted;
    const sent = this.linked.send({ kind: 'prepare', run, specification: canonical, digest, scaling });
    if (!sent) return false;
    // a member that is prepared otherwise keeps no vector from before
    this.prepared = { scaling };
    this.memory = EMPTY_MEMORY;
    this.last = null;
    return true;
  }
}
