import { createHash, randomBytes } from 'node:crypto';
import { createReadStream } from 'node:fs';
import { mkdir, open, rename, rm, stat, unlink } from 'node:fs/promises';
import { dirname, resolve } from 'node:path';
import { setTimeout as delay } from 'node:timers/promises';
import { type Checked, fail, succeed } from '../../protocol/failure.js';

/** Makes a folder, its parents too, readable by its owner only. */
export const makeFolder = (path: string): Promise<Checked<null>> =>
  unwritableIfFails(path, async () => {
    await makePath(path, 0o700);
    return null;
  });

/** Makes a folder, its parents too; throws what the file system says. */
export async function makePath(path: string, mode = 0o777): Promise<void> {
  try {
    await mkdir(path, { recursive: true, mode });
  } catch (error) {
    // Node says so of a read-only file system too: the first folder that is missing tells the true reason.
    if ((error as NodeJS.ErrnoException).code === 'ENOENT') await mkdir(await firstMissing(resolve(path)));
    throw error;
  }
}

async function firstMissing(path: string): Promise<string> {
  const parent = dirname(path);
  const isThere = await stat(parent).then(
    () => true,
    () => false,
  );
  return isThere || parent === path ? path : firstMissing(parent);
}

/** Mode of every file in the state folder: for its owner only. */
export const FILE_MODE = 0o600;

/** Replaces a file as a whole: after a crash there is the old one or the new one, never a part. */
export const writeWhole = (path: string, text: string): Promise<Checked<null>> =>
  unwritableIfFails(path, async () => {
    const draft = `${path}.${randomBytes(4).toString('hex')}.draft`;
    const handle = await open(draft, 'wx', FILE_MODE);
    try {
      await handle.writeFile(text);
      await handle.sync();
    } catch (error) {
      await handle.close();
      await unlink(draft);
      throw error;
    }
    await handle.close();
    await rename(draft, path);
    await syncFolder(dirname(path));
    return null;
  });

/** A name in a folder is on stable storage only once the folder is. */
export async function syncFolder(path: string): Promise<void> {
  const folder = await open(path, 'r');
  try {
    await folder.sync();
  } finally {
    await folder.close();
  }
}

const HOLD_TRIES_MOST = 200;
const HOLD_AGAIN_MS = 25;
/** A hold this old was left behind by a crash: what is done under one takes milliseconds. */
const HOLD_STALE_MS = 4000;

/** Runs `action` while no other process does the same for this file. */
export async function holding<T>(path: string, action: () => Promise<Checked<T>>): Promise<Checked<T>> {
  const hold = `${path}.hold`;
  const held = await unwritableIfFails(hold, () => takeHold(hold));
  if (!held.ok) return held;
  try {
    return await action();
  } finally {
    await rm(hold, { force: true });
  }
}

async function takeHold(hold: string): Promise<null> {
  for (let tries = 1; ; tries++) {
    try {
      await (await open(hold, 'wx', FILE_MODE)).close();
      return null;
    } catch (error) {
      if ((error as NodeJS.ErrnoException).code !== 'EEXIST' || tries === HOLD_TRIES_MOST) throw error;
    }
    if (await isStale(hold)) await rm(hold, { force: true });
    else await delay(HOLD_AGAIN_MS);
  }
}

async function isStale(hold: string): Promise<boolean> {
  try {
    return Date.now() - (await stat(hold)).mtimeMs > HOLD_STALE_MS;
  } catch (error) {
    if ((error as NodeJS.ErrnoException).code === 'ENOENT') return false;
    throw error;
  }
}

/** The value of `action`, or `state-unwritable` where the file system refuses. */
export async function unwritableIfFails<T>(path: string, action: () => Promise<T> | T): Promise<Checked<T>> {
  try {
    return succeed(await action());
  } catch (error) {
    return unwritable(path, error);
  }
}

/** What the file system refused, as a failure. */
export function unwritable(path: string, error: unknown): Checked<never> {
  const reason = error instanceof Error ? error.message : String(error);
  return fail('state-unwritable', `The state folder cannot be read or written: ${reason}.`, {
    remedy: 'Check the space and the rights of the folder given with --state.',
    where: { file: path },
  });
}

/** SHA-256 of a file, hex. Rejects where it cannot be read. */
export async function sha256Of(file: string): Promise<string> {
  const hash = createHash('sha256');
  for await (const piece of createReadStream(file)) hash.update(piece);
  return hash.digest('hex');
}
