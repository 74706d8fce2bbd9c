import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import { numbersOfAnswer, numbersOfWork } from '../../protocol/numbers.js';
import { isRefusal, type Reply } from './panel-state.js';
import {
  type ConnectionMemory,
  EMPTY_MEMORY,
  rememberAnswered,
  rememberSent,
  slimWorks,
} from './slim-ask.js';

/**
 * Numbers to and from each member, in roster order, as they are when no link is lost and nothing is asked twice: the
 * same for the same run, whatever happened on the way.
 */
export class NumbersTally {
  private readonly memories: ConnectionMemory[];
  private readonly down: number[];
  private readonly up: number[];

  constructor(memberCount: number) {
    this.memories = Array.from({ length: memberCount }, () => EMPTY_MEMORY);
    this.down = new Array<number>(memberCount).fill(0);
    this.up = new Array<number>(memberCount).fill(0);
  }

  /**
   * What one ask asked of each member, in full (null: nothing), and what came before its barrier opened: per member the
   * number of the ask it owed the reply to, and the reply.
   */
  add(
    works: readonly (readonly Work[] | null)[],
    owed: readonly (number | null)[],
    replies: readonly (Reply | null)[],
  ): void {
    for (const [member, full] of works.entries()) {
      this.sent(member, full ?? []);
      const ask = owed[member];
      const reply = replies[member];
      if (ask !== null && reply !== null && !isRefusal(reply)) this.answered(member, ask, reply);
    }
  }

  private sent(member: number, full: readonly Work[]): void {
    const sent = slimWorks(full, this.memories[member]);
    this.memories[member] = rememberSent(this.memories[member], sent);
    for (const work of sent) this.down[member] += numbersOfWork(work);
  }

  private answered(member: number, ask: number, reply: readonly WorkAnswer[]): void {
    this.memories[member] = rememberAnswered(this.memories[member], ask, reply);
    for (const answer of reply) this.up[member] += numbersOfAnswer(answer);
  }

  numbers(): { readonly up: number; readonly down: number }[] {
    return this.up.map((up, member) => ({ up, down: this.down[member] }));
  }
}
