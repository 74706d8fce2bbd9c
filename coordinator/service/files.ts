import { mkdir, open, rename, unlink } from 'node:fs/promises';
import { dirname } from 'node:path';
import { type Checked, fail, succeed } from '../../protocol/failure.js';

/** Makes a folder, its parents too, readable by its owner only. */
export const makeFolder = (path: string): Promise<Checked<null>> =>
  unwritableIfFails(path, async () => {
    await mkdir(path, { recursive: true, mode: 0o700 });
    return null;
  });

/** Replaces a file as a whole: after a crash there is the old one or the new one, never a part. */
export const writeWhole = (path: string, text: string, mode = 0o644): Promise<Checked<null>> =>
  unwritableIfFails(path, async () => {
    const draft = `${path}.${process.pid}.draft`;
    const handle = await open(draft, 'w', mode);
    try {
      await handle.chmod(mode);
      await handle.writeFile(text);
      await handle.sync();
    } catch (error) {
      await handle.close();
      await unlink(draft);
      throw error;
    }
    await handle.close();
    await rename(draft, path);
    const folder = await open(dirname(path), 'r');
    try {
      await folder.sync();
    } finally {
      await folder.close();
    }
    return null;
  });

/** The value of `action`, or `state-unwritable` where the file system refuses. */
export async function unwritableIfFails<T>(path: string, action: () => Promise<T> | T): Promise<Checked<T>> {
  try {
    return succeed(await action());
  } catch (error) {
    const reason = error instanceof Error ? error.message : String(error);
    return fail('state-unwritable', `The state folder cannot be read or written: ${reason}.`, {
      remedy: 'Check the space and the rights of the folder given with --state.',
      where: { file: path },
    });
  }
}
