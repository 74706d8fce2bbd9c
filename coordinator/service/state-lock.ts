import { chmod, type FileHandle, open, readFile, rm } from 'node:fs/promises';
import { connect, createServer, type Server } from 'node:net';
import { join } from 'node:path';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { FILE_MODE, holding, unwritableIfFails, writeWhole } from './files.js';

const SOCKET = 'coordinator.sock';
const PID = 'coordinator.pid';

/**
 * Keeps a second coordinator of this machine off the same state folder. The owner listens on a socket in it
 * (`coordinator.sock`): whether somebody does, the kernel knows, also of a process in another container, whose number
 * says nothing here. What a dead process left behind is taken over. `coordinator.pid` is for people. The value gives the
 * folder free again.
 */
export async function lockState(folder: string, pid: number): Promise<Checked<() => Promise<void>>> {
  return holding(join(folder, SOCKET), async () => {
    const opened = await unwritableIfFails(folder, () => open(folder, 'r'));
    if (!opened.ok) return opened;
    const taken = await take(folder, opened.value, pid);
    if (!taken.ok) await opened.value.close();
    return taken;
  });
}

async function take(folder: string, handle: FileHandle, pid: number): Promise<Checked<() => Promise<void>>> {
  const path = join(folder, SOCKET);
  const address = socketAddress(path, handle);
  const inUse = await unwritableIfFails(path, () => isListenedTo(address));
  if (!inUse.ok) return inUse;
  if (inUse.value) return usedBy(path, await ownerOf(join(folder, PID)));
  const listening = await unwritableIfFails(path, async () => {
    await rm(path, { force: true });
    return listen(address);
  });
  if (!listening.ok) return listening;
  let held = true;
  const release = async (): Promise<void> => {
    if (!held) return;
    held = false;
    await rm(join(folder, PID), { force: true });
    // The socket goes from the folder with its server.
    await new Promise((resolve) => listening.value.close(resolve));
    await handle.close();
  };
  const kept = await unwritableIfFails(path, () => chmod(path, FILE_MODE));
  const written = kept.ok ? await writeWhole(join(folder, PID), `${pid}\n`) : kept;
  if (written.ok) return succeed(release);
  await new Promise((resolve) => listening.value.close(resolve));
  return written;
}

/** The address of a socket has some hundred bytes at most: where Linux allows it, the open folder stands for its path. */
const socketAddress = (path: string, folder: FileHandle): string =>
  process.platform === 'linux' ? `/proc/self/fd/${folder.fd}/${SOCKET}` : path;

function isListenedTo(address: string): Promise<boolean> {
  return new Promise((resolve, reject) => {
    const socket = connect(address);
    socket.once('connect', () => {
      socket.destroy();
      resolve(true);
    });
    socket.once('error', (error: NodeJS.ErrnoException) => {
      // An owner that does not look at those who ask has a full queue of them.
      if (error.code === 'EAGAIN') resolve(true);
      else if (error.code === 'ENOENT' || error.code === 'ECONNREFUSED') resolve(false);
      else reject(error);
    });
  });
}

function listen(address: string): Promise<Server> {
  return new Promise((resolve, reject) => {
    const server = createServer((socket) => socket.destroy());
    server.once('error', reject);
    server.listen(address, () => {
      server.unref();
      resolve(server);
    });
  });
}

const usedBy = (path: string, pid: string | null): Checked<never> =>
  fail(
    'state-unwritable',
    `${pid === null ? 'Another process' : `Process ${pid}`} uses this state folder already.`,
    {
      remedy: 'Stop it, or give another folder with --state.',
      where: { file: path },
    },
  );

async function ownerOf(path: string): Promise<string | null> {
  try {
    return /^\d+$/m.exec(await readFile(path, 'utf8'))?.[0] ?? null;
  } catch {
    // Who it is serves the message alone; that somebody is there is known.
    return null;
  }
}
