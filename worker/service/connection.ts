import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { type Checked, type Failure, type FailureCode, fail } from '../../protocol/failure.js';
import type { Link } from '../../protocol/link/link.js';
import type { Hello } from '../../protocol/messages/session.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import type { Answerer } from './answerer.js';
import { backoffMs } from './backoff.js';
import type { WorkerEvent } from './events.js';
import { type SessionEnd, serveLink } from './session.js';

export type CoordinatorLink = Link<ToCoordinator, ToWorker>;

/** Timers, passed in. */
export interface Timers {
  /** Resolves after the time, or at once when the signal is aborted. */
  wait(ms: number, signal: AbortSignal): Promise<void>;
}

export interface ConnectionDeps {
  /** For the log. */
  readonly url: string;
  readonly hello: Hello;
  readonly connect: () => Promise<Checked<CoordinatorLink>>;
  readonly answerer: Answerer;
  readonly timers: Timers;
  readonly random: () => number;
  readonly onEvent: (event: WorkerEvent) => void;
  /** Aborted to stop: the answers in the making are finished within the grace time, then the link is closed. */
  readonly stop: AbortSignal;
  readonly graceMs: number;
  /** Leave after the first run that ends. */
  readonly once: boolean;
}

/** Failures that trying again does not mend. */
const FINAL: ReadonlySet<FailureCode> = new Set([
  'token-refused',
  'certificate-refused',
  'version-unsupported',
  'site-unknown',
]);
/** Final before the first welcome: later the certificate is one that was trusted, and may be renewed. */
const FINAL_AT_FIRST: ReadonlySet<FailureCode> = new Set(['certificate-untrusted']);

/**
 * Keeps a link to the coordinator and answers what it asks, until told to stop (null) or until the coordinator says
 * that this worker has no business there (the failure). A lost link is tried again for ever, ever more slowly.
 */
export async function keepConnected(deps: ConnectionDeps): Promise<Failure | null> {
  let attempt = 0;
  let everWelcomed = false;
  while (!deps.stop.aborted) {
    const end = await connectOnce(deps, everWelcomed);
    if (end.kind === 'stopped') return null;
    if (end.kind === 'final') return end.failure;
    everWelcomed ||= end.welcomed;
    attempt = end.worked ? 1 : attempt + 1;
    const retryMs = backoffMs(attempt, deps.random());
    const { closeCode, reason } = end;
    deps.onEvent({ event: 'disconnected', closeCode, reason, retryMs, attempt });
    await deps.timers.wait(retryMs, deps.stop);
  }
  return null;
}

async function connectOnce(deps: ConnectionDeps, everWelcomed: boolean): Promise<SessionEnd> {
  const link = await deps.connect();
  if (!link.ok) {
    const { failure } = link;
    const final = FINAL.has(failure.code) || (!everWelcomed && FINAL_AT_FIRST.has(failure.code));
    if (final) return { kind: 'final', failure };
    return { kind: 'lost', closeCode: null, reason: failure.message, welcomed: false, worked: false };
  }
  const end = await serveLink(link.value, deps);
  if (end.kind !== 'lost' || end.closeCode === null) return end;
  const failure = finalFailure(end.closeCode, end.reason);
  return failure === null ? end : { kind: 'final', failure };
}

/** What a close code means for good; null where it is worth coming back. */
function finalFailure(code: number, reason: string): Failure | null {
  const said = reason === '' ? '' : ` It said: ${reason}`;
  switch (code) {
    case CLOSE_CODES.tokenRefused:
      return fail('token-refused', `The coordinator refused this worker's token.${said}`, {
        remedy: 'Ask the analyst for a token of this site and put it into the token file.',
      }).failure;
    case CLOSE_CODES.certificateRefused:
      return fail('certificate-refused', `The coordinator refuses this worker's certificate.${said}`, {
        remedy: 'Renew the certificate named as `certificate-file`.',
      }).failure;
    case CLOSE_CODES.versionUnsupported:
      return fail('version-unsupported', `The coordinator speaks another version of the protocol.${said}`, {
        remedy: 'Run the same release of commonfit on both sides.',
      }).failure;
    case CLOSE_CODES.replaced:
      return fail(
        'site-taken',
        'Another worker joined as this site and shard; this one leaves the place to it.',
        {
          remedy: 'Run one worker for each site, or give each its own shard in the site file.',
        },
      ).failure;
    default:
      return null;
  }
}
