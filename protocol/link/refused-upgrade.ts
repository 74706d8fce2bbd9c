import type { IncomingMessage } from 'node:http';
import { type Checked, fail } from '../failure.js';
import { SUBPROTOCOL } from '../version.js';

/**
 * Why the address that a worker named did not upgrade. Codes: `token-refused` or `certificate-refused` (HTTP 401, 403),
 * `version-unsupported` (426), `link-lost` (anything else: worth trying again).
 */
export async function refusedUpgrade(response: IncomingMessage): Promise<Checked<never>> {
  const status = response.statusCode ?? 0;
  if (status === 426) return noCommonVersion();
  const { code, detail } = await problemIn(response);
  if (status !== 401 && status !== 403) {
    const said = detail === null ? '' : ` It said: ${detail}`;
    return fail('link-lost', `The address answered with HTTP ${status} instead of a link.${said}`);
  }
  if (code === 'certificate-refused') {
    return fail(code, detail ?? 'The coordinator refused the certificate of this worker.');
  }
  if (detail !== null) return fail('token-refused', `The coordinator refused the token: ${detail}`);
  return fail('token-refused', `The coordinator refused the token (HTTP ${status}).`, {
    remedy: 'Ask the analyst for a token of this site.',
  });
}

export function noCommonVersion(): Checked<never> {
  return fail('version-unsupported', `The coordinator does not speak ${SUBPROTOCOL}.`, {
    remedy: 'Run the same release of commonfit on both sides.',
  });
}

/** More than a coordinator's problem details take. */
const PROBLEM_BYTES_MOST = 4096;

interface Said {
  readonly code: string | null;
  /** Fit to be shown on a terminal. */
  readonly detail: string | null;
}
const NOTHING_SAID: Said = { code: null, detail: null };

/** What a problem (RFC 9457) says; nothing where the reply is none. */
async function problemIn(response: IncomingMessage): Promise<Said> {
  let body = '';
  try {
    for await (const piece of response) {
      body += String(piece);
      if (body.length > PROBLEM_BYTES_MOST) return NOTHING_SAID;
    }
    const { code, detail } = JSON.parse(body) as { code?: unknown; detail?: unknown };
    return {
      code: typeof code === 'string' ? code : null,
      detail: typeof detail === 'string' && /^[\P{C}]{1,500}$/u.test(detail) ? detail : null,
    };
  } catch {
    // A reply that breaks off or is no JSON says nothing; the status has said what matters.
    return NOTHING_SAID;
  }
}
