import { createHash, randomBytes, timingSafeEqual } from 'node:crypto';
import { readFileSync, statSync } from 'node:fs';
import { join } from 'node:path';
import { z } from 'zod';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { holding, makeFolder, writeWhole } from './files.js';

const holderSchema = z.strictObject({ kind: z.enum(['site', 'analyst']), name: z.string().min(1).max(64) });

/** Whom a token speaks for: a site's workers, or an analyst. */
export type Holder = z.infer<typeof holderSchema>;

const document = z.strictObject({
  format: z.literal(1),
  tokens: z.array(
    z.strictObject({ ...holderSchema.shape, sha256: z.string().length(64), issuedAt: z.string() }),
  ),
});

type TokenDocument = z.infer<typeof document>;

/** Bytes of randomness in a token. */
const TOKEN_BYTES = 32;
/** A longer string is no token of ours and is not hashed. */
const TOKEN_CHARACTERS_MOST = 200;

export interface Tokens {
  /** A new token for the holder, in plain text for the only time; the holder's token before it is void. */
  issue(holder: Holder): Promise<Checked<string>>;
  /** Whom the token speaks for; null when it is none of ours. */
  holderOf(token: string): Checked<Holder | null>;
  /** All who hold a token. */
  holders(): Checked<readonly Holder[]>;
}

/**
 * The tokens of a state folder: `tokens.json`, mode 0600, holds SHA-256 digests only. Another process may issue tokens
 * meanwhile (`commonfit serve` need not be stopped): the file is read again when it has changed.
 */
export function openTokens(stateFolder: string): Tokens {
  const path = join(stateFolder, 'tokens.json');
  let read: { readonly stamp: string; readonly document: TokenDocument } | null = null;

  const current = (): Checked<TokenDocument> => {
    const stamp = stampOf(path);
    if (stamp === null) return succeed({ format: 1, tokens: [] });
    if (read?.stamp === stamp) return succeed(read.document);
    const parsed = readDocument(path);
    if (parsed.ok) read = { stamp, document: parsed.value };
    return parsed;
  };

  const addTo = async (holder: Holder): Promise<Checked<string>> => {
    const before = current();
    if (!before.ok) return before;
    const token = randomBytes(TOKEN_BYTES).toString('base64url');
    const others = before.value.tokens.filter(
      ({ kind, name }) => kind !== holder.kind || name !== holder.name,
    );
    const sha256 = digestOf(token).toString('hex');
    const issued = { ...holder, sha256, issuedAt: new Date().toISOString() };
    const next: TokenDocument = { format: 1, tokens: [...others, issued] };
    const kept = await writeWhole(path, `${JSON.stringify(next, null, 2)}\n`, 0o600);
    return kept.ok ? succeed(token) : kept;
  };

  return {
    async issue(holder) {
      const folder = await makeFolder(stateFolder);
      return folder.ok ? holding(path, () => addTo(holder)) : folder;
    },
    holderOf(token) {
      const known = current();
      if (!known.ok) return known;
      if (token.length > TOKEN_CHARACTERS_MOST) return succeed(null);
      const digest = digestOf(token);
      let found: Holder | null = null;
      // All are compared, each in constant time: how long it takes says nothing about which digest came near.
      for (const { kind, name, sha256 } of known.value.tokens) {
        if (timingSafeEqual(digest, Buffer.from(sha256, 'hex'))) found = { kind, name };
      }
      return succeed(found);
    },
    holders() {
      const known = current();
      return known.ok ? succeed(known.value.tokens.map(({ kind, name }) => ({ kind, name }))) : known;
    },
  };
}

/** The token of an `Authorization: Bearer …` header (RFC 6750, section 2.1). */
export function bearerOf(authorization: string | undefined): string | null {
  return /^Bearer +([A-Za-z0-9\-._~+/]+=*)$/i.exec(authorization ?? '')?.[1] ?? null;
}

const digestOf = (token: string): Buffer => createHash('sha256').update(token, 'utf8').digest();

/** Changes whenever the file is replaced; null where there is none. */
function stampOf(path: string): string | null {
  const stat = statSync(path, { throwIfNoEntry: false, bigint: true });
  return stat === undefined ? null : `${stat.ino}:${stat.mtimeNs}:${stat.size}`;
}

function readDocument(path: string): Checked<TokenDocument> {
  try {
    const parsed = document.safeParse(JSON.parse(readFileSync(path, 'utf8')));
    if (parsed.success) return succeed(parsed.data);
    return unreadable(path, z.prettifyError(parsed.error));
  } catch (error) {
    return unreadable(path, error instanceof Error ? error.message : String(error));
  }
}

const unreadable = (path: string, reason: string): Checked<never> =>
  fail('file-unreadable', `The token file cannot be used: ${reason}.`, {
    remedy: 'Restore it, or remove it and issue every token again.',
    where: { file: path },
  });
