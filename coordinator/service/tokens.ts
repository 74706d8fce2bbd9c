import { createHash, randomBytes, timingSafeEqual } from 'node:crypto';
import { readFileSync, statSync } from 'node:fs';
import { join } from 'node:path';
import { z } from 'zod';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { holding, makeFolder, writeWhole } from './files.js';

const holderSchema = z.strictObject({ kind: z.enum(['site', 'analyst']), name: z.string().min(1).max(64) });

/** Whom a token speaks for: a site's workers, or an analyst. */
export type Holder = z.infer<typeof holderSchema>;

const mayOf = z.enum(['watch', 'submit']);
/** What an analyst may do: look at runs and results only, or submit and cancel as well. */
export type May = z.infer<typeof mayOf>;

/** A holder whose token was shown, with what an analyst may do. */
export type Admitted =
  | { readonly kind: 'site'; readonly name: string }
  | { readonly kind: 'analyst'; readonly name: string; readonly may: May };

const issuedSchema = z.strictObject({
  ...holderSchema.shape,
  sha256: z.string().length(64),
  issuedAt: z.string(),
  /** ISO time from which on the token is refused; null: never. Format 1 had none. */
  expiresAt: z.iso.datetime().nullable().default(null),
  /** Of an analyst; a site's is not looked at. */
  may: mayOf.default('submit'),
});
/** One token as it is kept: its digest, never itself. */
export type IssuedToken = z.infer<typeof issuedSchema>;

const document = z.strictObject({
  format: z.union([z.literal(1), z.literal(2)]),
  tokens: z.array(issuedSchema),
});

type TokenDocument = z.infer<typeof document>;

/** On what terms a token is issued. */
export interface Terms {
  /** Milliseconds from now until it is refused; null: never. */
  readonly lastsMs: number | null;
  readonly may: May;
}
const TERMS_DEFAULT: Terms = { lastsMs: null, may: 'submit' };

/** Bytes of randomness in a token. */
const TOKEN_BYTES = 32;
/** A longer string is no token of ours and is not hashed. */
const TOKEN_CHARACTERS_MOST = 200;

export interface Tokens {
  /** A new token for the holder, in plain text for the only time; the holder's token before it is void. */
  issue(holder: Holder, terms?: Terms): Promise<Checked<string>>;
  /** Voids the holder's token; false when there is none. */
  revoke(holder: Holder): Promise<Checked<boolean>>;
  /** Whom the token speaks for; null when it is none of ours; `token-refused` when it has expired. */
  holderOf(token: string): Checked<Admitted | null>;
  /** All who hold a token, expired or not. */
  holders(): Checked<readonly IssuedToken[]>;
}

export interface TokenParts {
  /** Milliseconds since 1970. */
  readonly now: () => number;
  /** Called with the digest of a token each time it was good. */
  readonly onUse: (sha256: string) => void;
}

/**
 * The tokens of a state folder: `tokens.json`, mode 0600, holds SHA-256 digests only. Another process may issue tokens
 * meanwhile (`commonfit serve` need not be stopped): the file is read again when it has changed.
 */
export function openTokens(stateFolder: string, parts: Partial<TokenParts> = {}): Tokens {
  const { now = Date.now, onUse = () => {} } = parts;
  const path = join(stateFolder, 'tokens.json');
  let read: { readonly stamp: string; readonly document: TokenDocument } | null = null;

  const current = (): Checked<TokenDocument> => {
    const stamped = stampOf(path);
    if (!stamped.ok) return stamped;
    const stamp = stamped.value;
    if (stamp === null) return succeed({ format: 2, tokens: [] });
    if (read?.stamp === stamp) return succeed(read.document);
    const parsed = readDocument(path);
    if (parsed.ok) read = { stamp, document: parsed.value };
    return parsed;
  };

  /** Puts `issued` in the place of the holder's token; whether there was one. */
  const replace = async (holder: Holder, issued: readonly IssuedToken[]): Promise<Checked<boolean>> => {
    const before = current();
    if (!before.ok) return before;
    const { tokens } = before.value;
    const others = tokens.filter(({ kind, name }) => kind !== holder.kind || name !== holder.name);
    const next: TokenDocument = { format: 2, tokens: [...others, ...issued] };
    const kept = await writeWhole(path, `${JSON.stringify(next, null, 2)}\n`);
    return kept.ok ? succeed(others.length < tokens.length) : kept;
  };

  return {
    async issue(holder, { lastsMs, may } = TERMS_DEFAULT) {
      const folder = await makeFolder(stateFolder);
      if (!folder.ok) return folder;
      const token = randomBytes(TOKEN_BYTES).toString('base64url');
      const issuedMs = now();
      const issued: IssuedToken = {
        ...holder,
        sha256: digestOf(token).toString('hex'),
        issuedAt: new Date(issuedMs).toISOString(),
        expiresAt: lastsMs === null ? null : new Date(issuedMs + lastsMs).toISOString(),
        may,
      };
      const kept = await holding(path, () => replace(holder, [issued]));
      return kept.ok ? succeed(token) : kept;
    },
    async revoke(holder) {
      // A folder that is not there is not made for the sake of saying that nobody has a token in it.
      const stamp = stampOf(path);
      if (!stamp.ok) return stamp;
      return stamp.value === null ? succeed(false) : holding(path, () => replace(holder, []));
    },
    holderOf(token) {
      const known = current();
      if (!known.ok) return known;
      if (token.length > TOKEN_CHARACTERS_MOST) return succeed(null);
      const digest = digestOf(token);
      let found: IssuedToken | null = null;
      // All are compared, each in constant time: how long it takes says nothing about which digest came near.
      for (const issued of known.value.tokens) {
        if (timingSafeEqual(digest, Buffer.from(issued.sha256, 'hex'))) found = issued;
      }
      if (found === null) return succeed(null);
      const { kind, name, expiresAt, may, sha256 } = found;
      if (expiresAt !== null && now() >= Date.parse(expiresAt)) return expired(kind, name, expiresAt);
      onUse(sha256);
      return succeed(kind === 'site' ? { kind, name } : { kind, name, may });
    },
    holders() {
      const known = current();
      return known.ok ? succeed(known.value.tokens) : known;
    },
  };
}

const expired = (kind: Holder['kind'], name: string, expiresAt: string): Checked<never> =>
  fail('token-refused', `The token of ${kind} ${name} expired on ${minuteOf(expiresAt)}.`, {
    remedy:
      kind === 'site'
        ? 'Ask the analyst for a token of this site.'
        : 'Have `commonfit admit` issue a new one.',
  });

/** `2031-05-04 10:15 UTC`. */
export const minuteOf = (iso: string): string => `${iso.slice(0, 10)} ${iso.slice(11, 16)} UTC`;

/** The token of an `Authorization: Bearer …` header (RFC 6750, section 2.1). */
export function bearerOf(authorization: string | undefined): string | null {
  return /^Bearer +([A-Za-z0-9\-._~+/]+=*)$/i.exec(authorization ?? '')?.[1] ?? null;
}

const digestOf = (token: string): Buffer => createHash('sha256').update(token, 'utf8').digest();

/** Changes whenever the file is replaced; null where there is none. */
function stampOf(path: string): Checked<string | null> {
  try {
    const stat = statSync(path, { throwIfNoEntry: false, bigint: true });
    return succeed(stat === undefined ? null : `${stat.ino}:${stat.mtimeNs}:${stat.size}`);
  } catch (error) {
    return unreadable(path, error instanceof Error ? error.message : String(error));
  }
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
