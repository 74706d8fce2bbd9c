import { constants } from 'node:fs';
import { open, readFile } from 'node:fs/promises';
import { basename, dirname, join } from 'node:path';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { type Approval, parseApprovals, withApproval } from '../custody/approvals.js';
import type { LedgerFile } from '../custody/ledger.js';

/** What a worker keeps beside its site file `NAME.site.yaml`: `NAME.ledger`, `NAME.approvals`, and rows that have no name for long. */
export function besideSiteFile(siteFile: string, extension: 'ledger' | 'approvals' | 'rows'): string {
  const name = basename(siteFile).replace(/(\.site)?\.ya?ml$/, '');
  return join(dirname(siteFile), `${name}.${extension}`);
}

const codeOf = (error: unknown): string =>
  error instanceof Error && 'code' in error ? String(error.code) : String(error);

/** Text of a file; null where there is none. */
export async function readTextFile(file: string): Promise<Checked<string | null>> {
  try {
    return succeed(await readFile(file, 'utf8'));
  } catch (error) {
    if (codeOf(error) === 'ENOENT') return succeed(null);
    return fail('file-unreadable', `The file cannot be read (${codeOf(error)}).`, {
      remedy: 'Check its path and its access rights.',
      where: { file },
    });
  }
}

/** Text of a file that has to be there. */
export async function readDocument(file: string): Promise<Checked<string>> {
  const text = await readTextFile(file);
  if (!text.ok) return text;
  if (text.value !== null) return { ok: true, value: text.value };
  return fail('file-unreadable', 'There is no such file.', { remedy: 'Check the path.', where: { file } });
}

export async function readApprovals(file: string): Promise<Checked<readonly Approval[]>> {
  const text = await readTextFile(file);
  return text.ok ? parseApprovals(text.value ?? '', file) : text;
}

/** Adds one approval; `false` where the digest was approved already. */
export async function addApproval(file: string, added: Approval): Promise<Checked<boolean>> {
  const text = await readTextFile(file);
  if (!text.ok) return text;
  const before = text.value ?? '';
  const approvals = parseApprovals(before, file);
  if (!approvals.ok) return approvals;
  const after = withApproval(before, approvals.value, added);
  if (after === before) return succeed(false);
  const written = await withFile(file, async (handle) => {
    await handle.truncate(0);
    await handle.write(after, 0);
    await handle.sync();
  });
  return written.ok ? succeed(true) : written;
}

/** Finds out before a run whether the ledger could be written; makes an empty one where there is none. */
export const checkLedgerWritable = (name: string): Promise<Checked<null>> => withFile(name, async () => {});

/**
 * The ledger on disk, mode 0600. `append` first checks that the file still has the length this process left it with:
 * two workers on one ledger would break its chain.
 */
export function ledgerOnDisk(name: string): LedgerFile {
  let length = 0;
  return {
    name,
    read: async () => {
      const text = await readTextFile(name);
      if (!text.ok) return text;
      length = Buffer.byteLength(text.value ?? '');
      return succeed(text.value ?? '');
    },
    cutTo: (bytes) =>
      withFile(name, async (handle) => {
        await handle.truncate(bytes);
        await handle.sync();
        length = bytes;
      }),
    append: async (line) => {
      const bytes = Buffer.from(`${line}\n`, 'utf8');
      let changed = false;
      const written = await withFile(name, async (handle) => {
        changed = (await handle.stat()).size !== length;
        if (changed) return;
        try {
          for (let at = 0; at < bytes.length; ) {
            at += (await handle.write(bytes, at, bytes.length - at, length + at)).bytesWritten;
          }
          await handle.datasync();
        } catch (error) {
          await handle.truncate(length);
          throw error;
        }
        length += bytes.length;
      });
      if (!changed) return written;
      return fail('ledger-broken', 'Another process has written to the ledger since this worker opened it.', {
        remedy: 'Run one worker for each site file, and start it again.',
        where: { file: name },
      });
    },
  };
}

async function withFile(
  file: string,
  use: (handle: Awaited<ReturnType<typeof open>>) => Promise<void>,
): Promise<Checked<null>> {
  try {
    const handle = await open(file, constants.O_RDWR | constants.O_CREAT, 0o600);
    try {
      await use(handle);
    } finally {
      await handle.close();
    }
    return succeed(null);
  } catch (error) {
    return fail('state-unwritable', `The file cannot be written (${codeOf(error)}).`, {
      remedy: 'Check its access rights and the space on the disk.',
      where: { file },
    });
  }
}
