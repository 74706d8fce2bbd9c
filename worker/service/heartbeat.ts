import { readFile, rm, writeFile } from 'node:fs/promises';
import { type Checked, fail, succeed } from '../../protocol/failure.js';

/** How often a worker writes its sign of life, and from which age on it is none. Milliseconds. */
const EVERY_MS = 5_000;
const AGE_MOST_MS = 60_000;

/**
 * Writes the time into a file for as long as the process is alive to it, so that a service manager can tell a worker that
 * hangs from one that waits for its coordinator. Returns what ends that and removes the file.
 */
export async function beat(file: string): Promise<Checked<() => Promise<void>>> {
  try {
    await write(file);
  } catch (error) {
    const code = (error as NodeJS.ErrnoException).code ?? 'unknown';
    return fail('state-unwritable', `The sign of life cannot be written (${code}).`, {
      remedy: 'Name another file with --heartbeat, or none.',
      where: { file },
    });
  }
  // A disk that fills up later lets the file grow old, which is what it then should say.
  const timer = setInterval(() => void write(file).catch(() => undefined), EVERY_MS);
  timer.unref();
  return succeed(async () => {
    clearInterval(timer);
    await rm(file, { force: true });
  });
}

const write = (file: string): Promise<void> => writeFile(file, `${Date.now()}\n`);

/** Whether a worker has written to the file within the last minute. */
export async function isAlive(file: string): Promise<Checked<null>> {
  const text = await readFile(file, 'utf8').catch(() => null);
  const place = { where: { file } };
  if (text === null) return fail('file-unreadable', 'No worker writes its sign of life here.', place);
  const ageMs = Date.now() - Number(text);
  if (ageMs <= AGE_MOST_MS) return succeed(null);
  return fail(
    'too-slow',
    `The worker's last sign of life is ${Math.round(ageMs / 1000)} seconds old.`,
    place,
  );
}
