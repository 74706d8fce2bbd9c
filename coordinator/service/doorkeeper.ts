import type { IncomingMessage } from 'node:http';
import { type Failure, fail } from '../../protocol/failure.js';
import { certificateProblem } from './client-certificate.js';
import type { HostTime, Notice } from './host-parts.js';
import { peerKey } from './peer-address.js';
import { type Problem, problemOf } from './problem.js';
import { RateLimiter } from './rate.js';
import type { ServiceSettings } from './settings.js';
import { type Admitted, bearerOf, type Tokens } from './tokens.js';

export interface DoorkeeperParts {
  readonly tokens: Tokens;
  readonly settings: Pick<
    ServiceSettings,
    'clientCaFile' | 'linksPerMinuteMost' | 'requestsPerMinuteMost' | 'refusalsPerMinuteMost'
  >;
  readonly time: Pick<HostTime, 'wallMs' | 'steadyMs'>;
  readonly notice: (notice: Notice) => void;
}

/** What is looked at of a request. */
export type Asking = Pick<IncomingMessage, 'headers' | 'method' | 'socket'>;

export type Let<T> =
  | { readonly ok: true; readonly value: T }
  | { readonly ok: false; readonly problem: Problem };

/** Methods that change nothing: all that an analyst who may only watch has need of. */
const WATCHING_METHODS: readonly (string | undefined)[] = ['GET', 'HEAD'];
const NOTICE_RATE = { burst: 1, perMinute: 1 } as const;

const eachMinute = (most: number): RateLimiter => new RateLimiter({ burst: most, perMinute: most });

/**
 * Who may come in, and how often. A good token is never held up by bad ones from the same address: a token cannot be
 * guessed, and the refusals are counted to spare the service their cost, not to lock anyone out.
 */
export class Doorkeeper {
  private readonly links: RateLimiter;
  private readonly requests: RateLimiter;
  private readonly refusals: RateLimiter;
  private readonly notices = new RateLimiter(NOTICE_RATE, 1000);

  constructor(private readonly parts: DoorkeeperParts) {
    const { linksPerMinuteMost, requestsPerMinuteMost, refusalsPerMinuteMost } = parts.settings;
    this.links = eachMinute(linksPerMinuteMost);
    this.requests = eachMinute(requestsPerMinuteMost);
    this.refusals = eachMinute(refusalsPerMinuteMost);
  }

  /** The site whose worker asks for a link. */
  site(request: IncomingMessage): Let<string> {
    const site = this.holderOf(request, 'site');
    if (!site.ok) return this.refuse(request, site.failure);
    const { name } = site.value;
    return this.within(this.links, `site ${name}`) ?? { ok: true, value: name };
  }

  /** Why a link that was let in would not be let in any more; null where it would. Counts as no use. */
  stillRefused(request: IncomingMessage): Failure | null {
    const site = this.holderOf(request, 'site');
    return site.ok ? null : site.failure;
  }

  /** The analyst who sends a request. */
  analyst(request: Asking): Let<string> {
    const analyst = this.holderOf(request, 'analyst');
    if (!analyst.ok) return this.refuse(request, analyst.failure);
    const { name, may } = analyst.value;
    const late = this.within(this.requests, `analyst ${name}`);
    if (late !== null) return late;
    if (may === 'submit' || WATCHING_METHODS.includes(request.method)) return { ok: true, value: name };
    const problem: Problem = {
      status: 403,
      title: 'Not allowed',
      detail: `Analyst ${name} may watch, not submit or cancel.`,
      code: 'unauthorised',
    };
    return { ok: false, problem };
  }

  /** A request to nowhere, or another that is refused before anyone asks who sent it. */
  refuse(request: Asking, failure: Failure): Let<never> {
    const { time, notice } = this.parts;
    const address = peerKey(request.socket.remoteAddress);
    const waitMs = this.refusals.take(address, time.steadyMs());
    if (waitMs === 0) {
      notice({ level: 'debug', code: failure.code, message: `A request of ${address} was refused.` });
      return { ok: false, problem: problemOf(failure) };
    }
    if (this.notices.take(address, time.steadyMs()) === 0) {
      const message = `Requests of ${address} are refused again and again, at last with ${failure.code}.`;
      notice({ level: 'warn', code: 'too-many-requests', message });
    }
    return tooMany('Too many requests of this address were refused.', waitMs);
  }

  private holderOf<K extends Admitted['kind']>(
    request: Asking,
    kind: K,
  ):
    | { readonly ok: true; readonly value: Extract<Admitted, { kind: K }> }
    | { readonly ok: false; readonly failure: Failure } {
    const unnamed = this.certificateProblem(request, null);
    if (unnamed !== null) return { ok: false, failure: unnamed };
    const token = bearerOf(request.headers.authorization);
    const holder = token === null ? null : this.parts.tokens.holderOf(token);
    if (holder !== null && !holder.ok) return holder;
    const found = holder?.value;
    if (found === undefined || found === null || !isOf(found, kind)) return STRANGER[kind];
    const named = this.certificateProblem(request, found.name);
    return named === null ? { ok: true, value: found } : { ok: false, failure: named };
  }

  private certificateProblem(request: Asking, name: string | null): Failure | null {
    const { settings, time } = this.parts;
    if (settings.clientCaFile === undefined) return null;
    return certificateProblem(request.socket, name, time.wallMs());
  }

  private within(rate: RateLimiter, who: string): Let<never> | null {
    const waitMs = rate.take(who, this.parts.time.steadyMs());
    if (waitMs === 0) return null;
    if (this.notices.take(who, this.parts.time.steadyMs()) === 0) {
      const message = `There are too many requests with the token of ${who}.`;
      this.parts.notice({ level: 'warn', code: 'too-many-requests', message });
    }
    return tooMany(`There are too many requests with the token of ${who}.`, waitMs);
  }
}

const isOf = <K extends Admitted['kind']>(
  holder: Admitted,
  kind: K,
): holder is Extract<Admitted, { kind: K }> => holder.kind === kind;

const STRANGER = {
  site: fail('token-refused', 'The token is missing, unknown or not one of a site.', {
    remedy: 'Ask the analyst for a token of this site.',
  }),
  analyst: fail('unauthorised', "This needs an analyst's token in the Authorization header.", {
    remedy: 'The coordinator writes one to analyst.token in its state folder at its first start.',
  }),
} as const;

function tooMany(message: string, waitMs: number): Let<never> {
  const retryAfterS = Math.ceil(waitMs / 1000);
  const { failure } = fail('too-many-requests', message, { remedy: `Try again in ${retryAfterS} seconds.` });
  return { ok: false, problem: { ...problemOf(failure), retryAfterS } };
}
