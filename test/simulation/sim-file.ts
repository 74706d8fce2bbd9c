import { type MemoryStore, memoryStore } from '../../coordinator/journal/memory-store.js';
import type { JournalStore } from '../../coordinator/journal/store.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { LedgerFile } from '../../worker/custody/ledger.js';
import type { SimProcess } from './sim-process.js';

/** How far an append has come: nothing of it on disk, a part, or all of it though the process does not know. */
export const APPEND_PHASES = ['nothing', 'torn', 'unacknowledged'] as const;
export type AppendPhase = (typeof APPEND_PHASES)[number];

/** What a disk does with an append; drawn from the seed. */
export interface DiskWeather {
  delayMs(): number;
  full(): boolean;
  /** Of `length` bytes, how many reach the disk first. */
  cut(length: number): number;
  /** Called as each phase begins; the process may be killed before it is over. */
  reached(phase: AppendPhase): void;
}

/** A file that outlives the processes that write it. A process killed in mid-append leaves none, a part or all of it. */
export class SimFile {
  readonly held: MemoryStore = memoryStore();
  private writer: SimProcess | null = null;

  bytes(): Uint8Array {
    return this.held.bytes();
  }

  text(): string {
    return Buffer.from(this.bytes()).toString('utf8');
  }

  /** False when the disk is full; a part of the bytes may then be on it. */
  async append(owner: SimProcess, bytes: Uint8Array, weather: DiskWeather): Promise<boolean> {
    if (this.writer?.alive) throw new Error('two appends to one file at once');
    this.writer = owner;
    weather.reached('nothing');
    await owner.sleep(weather.delayMs());
    const cut = weather.cut(bytes.length);
    await this.held.append(bytes.subarray(0, cut));
    const full = weather.full();
    if (!full) {
      weather.reached('torn');
      await owner.sleep(weather.delayMs());
      await this.held.append(bytes.subarray(cut));
      weather.reached('unacknowledged');
      await owner.sleep(weather.delayMs());
    }
    this.writer = null;
    return !full;
  }
}

export function journalStoreOn(file: SimFile, owner: SimProcess, weather: DiskWeather): JournalStore {
  const { size, read, truncate } = file.held;
  return {
    size,
    read,
    truncate,
    append: async (bytes) =>
      (await file.append(owner, bytes, weather)) ? succeed(null) : diskFull('The journal'),
    close: async () => {},
  };
}

/** The ledger's contract: a line that cannot be written leaves the file as it was. */
export function ledgerFileOn(file: SimFile, owner: SimProcess, weather: DiskWeather): LedgerFile {
  return {
    name: 'ledger',
    read: async () => succeed(file.text()),
    cutTo: (bytes) => file.held.truncate(bytes),
    append: async (line) => {
      const before = file.bytes().length;
      if (await file.append(owner, Buffer.from(`${line}\n`, 'utf8'), weather)) return succeed(null);
      await file.held.truncate(before);
      return diskFull('The ledger');
    },
  };
}

export const diskFull = (what: string): Checked<never> =>
  fail('state-unwritable', `${what} cannot be written: no space is left.`);
