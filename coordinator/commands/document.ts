import { readFile } from 'node:fs/promises';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { EXIT } from './exit-codes.js';
import { type Attempt, done, ending } from './terminal.js';

/** A fit specification as read from a file of this machine. */
export interface Document {
  readonly file: string;
  readonly text: string;
  readonly specification: FitSpecification;
  readonly digest: string;
}

/** Reads and checks a fit specification; every error it has comes back with file, line and field. */
export async function readDocument(file: string): Promise<Attempt<Document>> {
  let text: string;
  try {
    text = await readFile(file, 'utf8');
  } catch (error) {
    return ending(EXIT.document, [
      {
        code: 'file-unreadable',
        message: `The file cannot be read (${(error as NodeJS.ErrnoException).code ?? 'unknown'}).`,
        where: { file },
      },
    ]);
  }
  const parsed = parseFitSpecification(text, file);
  if (!parsed.ok) return ending(EXIT.document, parsed.failures);
  return done({ file, text, specification: parsed.value, digest: digestOf(canonicalText(parsed.value)) });
}
