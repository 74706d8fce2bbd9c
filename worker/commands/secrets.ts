import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { checkKeyPair, type KeyPair } from '../../protocol/link/key-pair.js';
import type { SiteFile } from '../custody/site-file.js';
import { readDocument } from '../service/site-folder.js';

/** What a worker shows its coordinator, and whom it trusts: the text of the files that the site file names. */
export interface Secrets {
  readonly token: string;
  readonly ca?: string;
  readonly pair?: KeyPair;
}

/** Codes: `file-unreadable`, `field-value` (no token, not PEM), `field-conflict` (the key is not the certificate's). */
export async function readSecrets({ coordinator }: SiteFile): Promise<Checked<Secrets>> {
  const token = await tokenIn(coordinator.tokenFile);
  if (!token.ok) return token;
  const { caFile, pairFiles } = coordinator;
  const ca = caFile === null ? succeed(null) : await readDocument(caFile);
  if (!ca.ok) return ca;
  const pair = pairFiles === null ? succeed(null) : await pairIn(pairFiles);
  if (!pair.ok) return pair;
  return succeed({
    token: token.value,
    ...(ca.value === null ? {} : { ca: ca.value }),
    ...(pair.value === null ? {} : { pair: pair.value }),
  });
}

async function tokenIn(file: string): Promise<Checked<string>> {
  const text = await readDocument(file);
  if (!text.ok) return text;
  const token = text.value.trim();
  if (/^\S+$/.test(token)) return succeed(token);
  return fail('field-value', 'The token file does not hold one token.', {
    remedy: 'Put the token that the analyst gave you into it, on one line.',
    where: { file },
  });
}

async function pairIn(files: NonNullable<SiteFile['coordinator']['pairFiles']>): Promise<Checked<KeyPair>> {
  const cert = await readDocument(files.certificate);
  if (!cert.ok) return cert;
  const key = await readDocument(files.key);
  if (!key.ok) return key;
  const misfit = checkKeyPair(
    { text: cert.value, file: files.certificate },
    { text: key.value, file: files.key },
  );
  return misfit === null ? succeed({ cert: cert.value, key: key.value }) : { ok: false, failure: misfit };
}
