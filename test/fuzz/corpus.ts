import { readdir, readFile } from 'node:fs/promises';
import { dirname, join } from 'node:path';
import { fileURLToPath } from 'node:url';

const here = dirname(fileURLToPath(import.meta.url));
/** Beside the sources, also for the compiled fuzzer in `dist/test/fuzz`. */
export const CORPUS_FOLDER = join(here.replace(/([/\\])dist([/\\]test[/\\]fuzz)$/, '$2'), 'corpus');

/** The kept inputs, hexadecimal, one a file and a line, in the order of their names. */
export async function readCorpus(): Promise<Uint8Array[]> {
  const names = (await readdir(CORPUS_FOLDER)).filter((name) => name.endsWith('.hex')).sort();
  return Promise.all(
    names.map(async (name) => {
      const hex = await readFile(join(CORPUS_FOLDER, name), 'utf8');
      return new Uint8Array(Buffer.from(hex.trim(), 'hex'));
    }),
  );
}
