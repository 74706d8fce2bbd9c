/** Why a TLS connection was not trusted, by the codes of Node and OpenSSL. */
const WORDS: Readonly<Record<string, string>> = {
  CERT_HAS_EXPIRED: 'it or its authority has expired, or the clock of this machine is ahead',
  CERT_NOT_YET_VALID: 'it or its authority is not valid yet, or the clock of this machine is behind',
  CERT_REVOKED: 'it was revoked',
  CERT_UNTRUSTED: 'its authority is not trusted',
  DEPTH_ZERO_SELF_SIGNED_CERT: 'it is a self-signed certificate and not the one trusted here',
  SELF_SIGNED_CERT_IN_CHAIN: 'it was signed by an authority that is not trusted here',
  UNABLE_TO_GET_ISSUER_CERT: 'it was signed by an authority that is not trusted here',
  UNABLE_TO_GET_ISSUER_CERT_LOCALLY: 'it was signed by an authority that is not trusted here',
  UNABLE_TO_VERIFY_LEAF_SIGNATURE: 'it was signed by an authority that is not trusted here',
  INVALID_PURPOSE: 'it was not made for this use',
  INVALID_CA: 'its authority is none that may sign certificates',
  ERR_TLS_CERT_ALTNAME_INVALID: 'it is for another host name or address',
};

/** The reason in words where an error says that the peer's certificate is not trusted; null where it says anything else. */
export function untrustedReason(error: unknown): string | null {
  const code = error instanceof Error ? (error as NodeJS.ErrnoException).code : undefined;
  return code !== undefined && Object.hasOwn(WORDS, code) ? WORDS[code] : null;
}
