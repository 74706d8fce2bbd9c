import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { z } from 'zod';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { writeWhole } from './files.js';
import type { Notice } from './host-parts.js';

const FILE = 'token-uses.json';
/** A token's use is written down at most this often. Milliseconds. */
const WRITTEN_EVERY_MS = 60_000;

const document = z.strictObject({ format: z.literal(1), uses: z.record(z.string(), z.iso.datetime()) });

export interface TokenUses {
  note(sha256: string): void;
  /** Resolved once what was noted is in the file, or could not be. */
  settled(): Promise<void>;
}

/**
 * Writes down when each token was last used, to the minute, by the token's digest: `token-uses.json`, mode 0600, in the
 * state folder. Only the coordinator that holds the folder writes it. A file that cannot be written is told of and stops
 * nothing.
 */
export function openTokenUses(
  stateFolder: string,
  now: () => number,
  notice: (notice: Notice) => void,
): TokenUses {
  const noted = new Map<string, number>();
  let written: Promise<void> = Promise.resolve();
  const write = async (): Promise<void> => {
    const before = await readTokenUses(stateFolder);
    const kept = before.ok ? [...before.value] : [];
    const uses = [...noted].map(([sha256, ms]) => [sha256, new Date(ms).toISOString()] as const);
    const text = JSON.stringify({ format: 1, uses: Object.fromEntries([...kept, ...uses]) }, null, 2);
    const done = await writeWhole(join(stateFolder, FILE), `${text}\n`);
    if (!done.ok) notice({ level: 'warn', ...done.failure });
  };
  return {
    note(sha256) {
      const ms = now();
      if (ms - (noted.get(sha256) ?? Number.NEGATIVE_INFINITY) < WRITTEN_EVERY_MS) return;
      noted.set(sha256, ms);
      written = written.then(write);
    },
    settled: () => written,
  };
}

/** When each token was last used (ISO), by its digest; empty where nothing is known. */
export async function readTokenUses(stateFolder: string): Promise<Checked<ReadonlyMap<string, string>>> {
  const file = join(stateFolder, FILE);
  try {
    const parsed = document.safeParse(JSON.parse(await readFile(file, 'utf8')));
    if (parsed.success) return succeed(new Map(Object.entries(parsed.data.uses)));
    return unreadable(file, z.prettifyError(parsed.error));
  } catch (error) {
    if ((error as NodeJS.ErrnoException).code === 'ENOENT') return succeed(new Map());
    return unreadable(file, error instanceof Error ? error.message : String(error));
  }
}

const unreadable = (file: string, reason: string): Checked<never> =>
  fail('file-unreadable', `The record of when tokens were used cannot be read: ${reason}.`, {
    remedy: 'Remove it; a new one is begun.',
    where: { file },
  });
