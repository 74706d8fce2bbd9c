import { createPrivateKey, type KeyObject, X509Certificate } from 'node:crypto';
import { type Failure, fail } from '../failure.js';

/** A PEM file: its text and its path, for messages. */
export interface PemFile {
  readonly text: string;
  readonly file: string;
}

/** A certificate (or a chain, its own first) and its private key, both PEM text. */
export interface KeyPair {
  readonly cert: string;
  readonly key: string;
}

/**
 * What is wrong with a certificate and its key before either is used; null where they fit. Codes: `field-value` (not
 * PEM, or a key under a passphrase), `field-conflict` (the key is another one's). Whether the certificate is good, its
 * reader says.
 */
export function checkKeyPair(certificate: PemFile, key: PemFile): Failure | null {
  const read = certificateIn(certificate.text);
  if (read === null) {
    return fail('field-value', 'The file holds no certificate in PEM.', { where: { file: certificate.file } })
      .failure;
  }
  const privateKey = privateKeyIn(key.text);
  if (privateKey === null) {
    return fail('field-value', 'The file holds no private key in PEM, or one under a passphrase.', {
      remedy: 'Give the key without a passphrase, in a file that its owner alone can read.',
      where: { file: key.file },
    }).failure;
  }
  if (read.checkPrivateKey(privateKey)) return null;
  return fail('field-conflict', `The key is not that of the certificate in ${certificate.file}.`, {
    remedy: 'Give the key that the certificate was made for.',
    where: { file: key.file },
  }).failure;
}

/** What is wrong with the file of an authority; null where it holds a certificate. Code `field-value`. */
export function checkAuthority({ text, file }: PemFile): Failure | null {
  if (certificateIn(text) !== null) return null;
  return fail('field-value', 'The file holds no certificate in PEM.', { where: { file } }).failure;
}

function certificateIn(text: string): X509Certificate | null {
  try {
    return new X509Certificate(text);
  } catch {
    // Whatever the parser stumbled over, the file is none of a certificate.
    return null;
  }
}

function privateKeyIn(text: string): KeyObject | null {
  try {
    return createPrivateKey(text);
  } catch {
    return null;
  }
}
