import { wrapped } from '../report/phrases.js';
import { readTokenUses } from '../service/token-uses.js';
import { type IssuedToken, minuteOf, openTokens } from '../service/tokens.js';
import { EXIT } from './exit-codes.js';
import { ending, say, sayEnding, sayJson, terminalOf } from './terminal.js';

/** Says who holds a token of a state folder. The exit code. */
export async function listHolders(state: string, json: boolean): Promise<number> {
  const holders = openTokens(state).holders();
  if (!holders.ok) return sayEnding(ending(EXIT.machine, [holders.failure]).ending, json);
  const uses = await readTokenUses(state);
  if (!uses.ok) return sayEnding(ending(EXIT.machine, [uses.failure]).ending, json);
  const { width } = terminalOf(process.stdout);
  if (holders.value.length === 0 && !json) say(['Nobody holds a token.']);
  for (const holder of holders.value) {
    const lastUsedAt = uses.value.get(holder.sha256) ?? null;
    const expired = holder.expiresAt !== null && Date.now() >= Date.parse(holder.expiresAt);
    if (json) sayJson(objectOf(holder, expired, lastUsedAt));
    else say(wrapped(sentenceOf(holder, expired, lastUsedAt), width, 2));
  }
  return EXIT.ok;
}

const objectOf = (
  { kind, name, may, issuedAt, expiresAt }: IssuedToken,
  expired: boolean,
  lastUsedAt: string | null,
): unknown => ({ kind, name, may: kind === 'site' ? null : may, issuedAt, expiresAt, expired, lastUsedAt });

function sentenceOf(
  { kind, name, may, issuedAt, expiresAt }: IssuedToken,
  expired: boolean,
  lastUsedAt: string | null,
): string {
  const role = kind === 'site' ? '' : may === 'watch' ? ', may watch' : ', may submit';
  const end =
    expiresAt === null ? 'does not expire' : `${expired ? 'expired' : 'expires'} ${minuteOf(expiresAt)}`;
  const used = lastUsedAt === null ? 'no use is recorded' : `last used ${minuteOf(lastUsedAt)}`;
  return `${kind} ${name}${role}: issued ${minuteOf(issuedAt)}; ${end}; ${used}.`;
}
