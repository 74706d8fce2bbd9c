import { readFile, unlink, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { unwritableIfFails } from './files.js';

/**
 * Keeps a second coordinator of this machine off the same state folder: `coordinator.pid` names the process. What a
 * dead process left behind is taken over. The value gives the folder free again.
 */
export async function lockState(folder: string, pid: number): Promise<Checked<() => Promise<void>>> {
  const path = join(folder, 'coordinator.pid');
  const other = await ownerOf(path);
  if (other !== null && other !== pid && isAlive(other)) {
    return fail('state-unwritable', `Process ${other} uses this state folder already.`, {
      remedy: 'Stop it, or give another folder with --state.',
      where: { file: path },
    });
  }
  const written = await unwritableIfFails(path, () => writeFile(path, `${pid}\n`, { mode: 0o600 }));
  if (!written.ok) return written;
  return succeed(async () => {
    if ((await ownerOf(path)) === pid) await unlink(path);
  });
}

async function ownerOf(path: string): Promise<number | null> {
  try {
    return Number.parseInt(await readFile(path, 'utf8'), 10) || null;
  } catch (error) {
    if ((error as NodeJS.ErrnoException).code === 'ENOENT') return null;
    throw error;
  }
}

function isAlive(pid: number): boolean {
  try {
    process.kill(pid, 0);
    return true;
  } catch (error) {
    return (error as NodeJS.ErrnoException).code === 'EPERM';
  }
}
