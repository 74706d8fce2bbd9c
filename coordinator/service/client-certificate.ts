import type { Socket } from 'node:net';
import { TLSSocket } from 'node:tls';
import { type Failure, fail } from '../../protocol/failure.js';
import { untrustedReason } from '../../protocol/link/certificate.js';

/**
 * Why the certificate that came with a connection does not let `name` in; null where it does. It must be one of the
 * authority that the server was given, not be past its time, and name the site or analyst whose token comes with it: as a
 * DNS name among its subject alternative names, or, where it has none, as its common name (RFC 9525 reads servers'
 * certificates so). `name` null: the holder is not known yet.
 */
export function certificateProblem(socket: Socket, name: string | null, nowMs: number): Failure | null {
  const refused = (found: string): Failure =>
    fail('certificate-refused', `The client certificate is refused: ${found}.`, {
      remedy:
        'Give a certificate of this site or analyst, signed by the authority that the coordinator was given.',
    }).failure;
  if (!(socket instanceof TLSSocket)) return refused('the connection is not one of TLS');
  const certificate = socket.getPeerX509Certificate();
  if (certificate === undefined) return refused('there is none');
  if (!socket.authorized) return refused(reasonOf(socket.authorizationError));
  if (Date.parse(certificate.validTo) <= nowMs) return refused(BY_OUR_CLOCK.CERT_HAS_EXPIRED);
  if (name === null || certificate.checkHost(name, { wildcards: false }) === name) return null;
  return refused(`it does not name ${name}`);
}

/** Told to a peer, for whom the clock in question is another machine's. */
const BY_OUR_CLOCK = {
  CERT_HAS_EXPIRED: "it has expired, by the coordinator's clock",
  CERT_NOT_YET_VALID: "it is not valid yet, by the coordinator's clock",
} as const;

/** Node sets the code of OpenSSL's finding, not an `Error`, although its types say so. */
function reasonOf(found: unknown): string {
  const code = typeof found === 'string' ? found : undefined;
  if (code === 'CERT_HAS_EXPIRED' || code === 'CERT_NOT_YET_VALID') return BY_OUR_CLOCK[code];
  return (
    untrustedReason(Object.assign(new Error(), { code })) ?? `it is not good (${code ?? 'no reason given'})`
  );
}
