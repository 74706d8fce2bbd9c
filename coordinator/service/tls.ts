import { X509Certificate } from 'node:crypto';
import { readFile } from 'node:fs/promises';
import { type Checked, type Failure, fail, succeed } from '../../protocol/failure.js';
import { checkAuthority, checkKeyPair, type KeyPair, type PemFile } from '../../protocol/link/key-pair.js';
import type { ServiceSettings } from './settings.js';

export interface Tls extends KeyPair {
  /** PEM text of the authority of workers' and analysts' certificates; null: none are asked for. */
  readonly clientCa: string | null;
}

/**
 * The PEM files that the settings name; null where there is no TLS. Codes: `file-unreadable`, `field-value` (not PEM),
 * `field-conflict` (the key is not the certificate's).
 */
export async function readTls({
  certFile,
  keyFile,
  clientCaFile,
}: Pick<ServiceSettings, 'certFile' | 'keyFile' | 'clientCaFile'>): Promise<Checked<Tls | null>> {
  if (certFile === undefined || keyFile === undefined) return succeed(null);
  const cert = await pemIn(certFile);
  if (!cert.ok) return cert;
  const key = await pemIn(keyFile);
  if (!key.ok) return key;
  const misfit = checkKeyPair(cert.value, key.value);
  if (misfit !== null) return { ok: false, failure: misfit };
  const pair = { cert: cert.value.text, key: key.value.text };
  if (clientCaFile === undefined) return succeed({ ...pair, clientCa: null });
  const authority = await pemIn(clientCaFile);
  if (!authority.ok) return authority;
  const wrong = checkAuthority(authority.value);
  return wrong === null
    ? succeed({ ...pair, clientCa: authority.value.text })
    : { ok: false, failure: wrong };
}

/** Why nobody will trust the coordinator's own certificate (PEM) at this time; null where its dates are in order. */
export function outOfDateFailure(cert: string, nowMs: number): Failure | null {
  const { validFrom, validTo } = new X509Certificate(cert);
  if (nowMs >= Date.parse(validFrom) && nowMs <= Date.parse(validTo)) return null;
  return fail(
    'certificate-untrusted',
    `The certificate of this coordinator is valid from ${validFrom} to ${validTo}; it is ${new Date(nowMs).toUTCString()} now.`,
    { remedy: 'Renew it, or set the clock of this machine.' },
  ).failure;
}

async function pemIn(file: string): Promise<Checked<PemFile>> {
  try {
    return succeed({ file, text: await readFile(file, 'utf8') });
  } catch (error) {
    const code = (error as NodeJS.ErrnoException).code ?? 'unknown';
    return fail('file-unreadable', `The file cannot be read (${code}).`, {
      remedy: 'Check its path and its access rights.',
      where: { file },
    });
  }
}
