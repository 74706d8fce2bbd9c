import { readFile } from 'node:fs/promises';
import { type Failure, fail } from '../../protocol/failure.js';
import { checkAuthority, checkKeyPair, type PemFile } from '../../protocol/link/key-pair.js';
import { EXIT } from './exit-codes.js';
import type { Trust } from './request.js';
import { type Attempt, done, ending } from './terminal.js';

export interface TrustOptions {
  readonly caFile?: string;
  readonly certificateFile?: string;
  readonly keyFile?: string;
}

/** Reads the PEM files that an analyst's command names. */
export async function trustOf({ caFile, certificateFile, keyFile }: TrustOptions): Promise<Attempt<Trust>> {
  if ((certificateFile === undefined) !== (keyFile === undefined)) {
    const { failure } = fail('field-conflict', '--certificate-file and --key-file go together.', {
      remedy: 'Give both, or neither.',
    });
    return ending(EXIT.usage, [failure]);
  }
  const ca = caFile === undefined ? done(null) : await authorityIn(caFile);
  if (!ca.ok) return ca;
  if (certificateFile === undefined || keyFile === undefined) return done({ ca: ca.value, pair: null });
  const certificate = await pemIn(certificateFile);
  if (!certificate.ok) return certificate;
  const key = await pemIn(keyFile);
  if (!key.ok) return key;
  const misfit = checkKeyPair(certificate.value, key.value);
  if (misfit !== null) return refused(misfit);
  return done({ ca: ca.value, pair: { cert: certificate.value.text, key: key.value.text } });
}

const refused = (failure: Failure): Attempt<never> => ending(EXIT.usage, [failure]);

async function authorityIn(file: string): Promise<Attempt<string>> {
  const read = await pemIn(file);
  if (!read.ok) return read;
  const wrong = checkAuthority(read.value);
  return wrong === null ? done(read.value.text) : refused(wrong);
}

async function pemIn(file: string): Promise<Attempt<PemFile>> {
  try {
    return done({ file, text: await readFile(file, 'utf8') });
  } catch (error) {
    const code = (error as NodeJS.ErrnoException).code ?? 'unknown';
    return refused(
      fail('file-unreadable', `The file cannot be read (${code}).`, { where: { file } }).failure,
    );
  }
}
