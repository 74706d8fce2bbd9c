import type { Refusal, WorkAnswer } from '../../protocol/messages/round.js';
import { type Member, memberName } from './run.js';
import type { Stop } from './survey.js';

/**
 * Every refusal among the replies as one reason to stop, in roster order, each with its remedy: what several custodians
 * have to mend is known after one try. Null where nobody refused; a member without a reply is none of this.
 */
export function refusalsOf(
  replies: readonly (readonly WorkAnswer[] | Refusal | null)[],
  roster: readonly Member[],
): Stop | null {
  const reasons = replies.flatMap((reply, index) =>
    reply === null || isAnswer(reply) ? [] : [reasonOf(memberName(roster[index]), reply)],
  );
  return reasons.length === 0 ? null : { outcome: 'refused', reason: reasons.join('; ') };
}

const isAnswer = (reply: readonly WorkAnswer[] | Refusal): reply is readonly WorkAnswer[] =>
  Array.isArray(reply);

function reasonOf(site: string, { message, remedy, code }: Refusal): string {
  return `site ${site} refused: ${message}${remedy === null ? '' : ` ${remedy}`} [${code}]`;
}
