import { type FileHandle, open } from 'node:fs/promises';
import { dirname } from 'node:path';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { JournalStore } from './store.js';

/** Opens the journal at `path`, new or not. Fails with `state-unwritable`. */
export async function fileStore(path: string): Promise<Checked<JournalStore>> {
  const opened = await attempt(path, async () => {
    const handle = await open(path, 'a+', 0o600);
    await syncFolder(dirname(path));
    return handle;
  });
  return opened.ok ? succeed(storeOn(path, opened.value)) : opened;
}

/** Opens a journal to be looked at: nothing can be added or cut. Fails with `file-unreadable`. */
export async function readOnlyStore(path: string): Promise<Checked<JournalStore>> {
  try {
    const handle = await open(path, 'r');
    const refused = fail('state-unwritable', 'The journal was opened to be read only.', {
      where: { file: path },
    });
    return succeed({
      ...storeOn(path, handle),
      append: async () => refused,
      truncate: async () => refused,
    });
  } catch (error) {
    const reason = error instanceof Error ? error.message : String(error);
    return fail('file-unreadable', `The journal cannot be read: ${reason}.`, { where: { file: path } });
  }
}

function storeOn(path: string, handle: FileHandle): JournalStore {
  return {
    size: () => attempt(path, async () => (await handle.stat()).size),
    read: (offset, length) => attempt(path, () => readFully(handle, offset, length)),
    append: (bytes) =>
      attempt(path, async () => {
        await writeFully(handle, bytes);
        await handle.datasync();
        // Bytes in a file that has no name any more are lost with this process.
        if ((await handle.stat()).nlink === 0) throw new Error('the file was removed');
        return null;
      }),
    truncate: (length) =>
      attempt(path, async () => {
        await handle.truncate(length);
        await handle.sync();
        return null;
      }),
    close: () => handle.close(),
  };
}

async function readFully(handle: FileHandle, offset: number, length: number): Promise<Uint8Array> {
  const buffer = new Uint8Array(length);
  let filled = 0;
  while (filled < length) {
    const { bytesRead } = await handle.read(buffer, filled, length - filled, offset + filled);
    if (bytesRead === 0) break;
    filled += bytesRead;
  }
  return buffer.subarray(0, filled);
}

async function writeFully(handle: FileHandle, bytes: Uint8Array): Promise<void> {
  let written = 0;
  while (written < bytes.length) {
    written += (await handle.write(bytes, written, bytes.length - written)).bytesWritten;
  }
}

/** A new file's name is on stable storage only once its folder is. */
async function syncFolder(path: string): Promise<void> {
  const folder = await open(path, 'r');
  try {
    await folder.sync();
  } finally {
    await folder.close();
  }
}

async function attempt<T>(path: string, action: () => Promise<T>): Promise<Checked<T>> {
  try {
    return succeed(await action());
  } catch (error) {
    const reason = error instanceof Error ? error.message : String(error);
    return fail('state-unwritable', `The journal cannot be read or written: ${reason}.`, {
      remedy: 'Check the space and the rights of the state folder, then start the coordinator again.',
      where: { file: path },
    });
  }
}
