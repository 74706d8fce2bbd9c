import { createHash, randomBytes } from 'node:crypto';

/** How long a browser stays signed in. Seconds. */
export const SESSION_LASTS_S = 12 * 3600;
const SESSIONS_MOST = 256;
const COOKIE = 'commonfit-session';
const COOKIE_PATTERN = /(?:^|;)\s*commonfit-session=([A-Za-z0-9_-]{43})(?=;|$)/;

interface Session {
  readonly token: string;
  readonly endsAtMs: number;
}

/**
 * Browsers that signed in with an analyst's token. A session stands for the token, which is judged anew at every
 * request: revoked or expired, it opens nothing. Kept in memory only, and so many at once: the oldest makes room.
 */
export class Sessions {
  private readonly open = new Map<string, Session>();

  /** `nowMs`: a clock that does not go back. */
  constructor(private readonly nowMs: () => number) {}

  /** The value of `Set-Cookie` for a token that was found good. */
  begin(token: string, isSecure: boolean): string {
    this.forgetEnded();
    for (const oldest of this.open.keys()) {
      if (this.open.size < SESSIONS_MOST) break;
      this.open.delete(oldest);
    }
    const id = randomBytes(32).toString('base64url');
    this.open.set(digestOf(id), { token, endsAtMs: this.nowMs() + SESSION_LASTS_S * 1000 });
    return cookie(id, SESSION_LASTS_S, isSecure);
  }

  /** The token that the session of a `Cookie` header stands for; null: there is none. */
  tokenOf(cookies: string | undefined): string | null {
    const key = keyOf(cookies);
    const session = key === null ? undefined : this.open.get(key);
    return session === undefined || session.endsAtMs <= this.nowMs() ? null : session.token;
  }

  /** Ends the session; gives the value of `Set-Cookie` that takes it out of the browser. */
  end(cookies: string | undefined, isSecure: boolean): string {
    const key = keyOf(cookies);
    if (key !== null) this.open.delete(key);
    return cookie('', 0, isSecure);
  }

  private forgetEnded(): void {
    for (const [key, { endsAtMs }] of this.open) if (endsAtMs <= this.nowMs()) this.open.delete(key);
  }
}

/** `HttpOnly` and `SameSite=Strict` (RFC 6265bis): no script reads it, and no other site's page sends it. */
const cookie = (id: string, lastsS: number, isSecure: boolean): string =>
  `${COOKIE}=${id}; Path=/; Max-Age=${lastsS}; HttpOnly; SameSite=Strict${isSecure ? '; Secure' : ''}`;

/** Sessions are kept under a digest, so that how long the look-up takes tells nothing about an id. */
const digestOf = (id: string): string => createHash('sha256').update(id, 'utf8').digest('base64');

function keyOf(cookies: string | undefined): string | null {
  const id = COOKIE_PATTERN.exec(cookies ?? '')?.[1];
  return id === undefined ? null : digestOf(id);
}
