import type { Checked } from '../../protocol/failure.js';

/** Where a journal's bytes are kept: a file in the coordinator's state folder, memory in tests and simulations. */
export interface JournalStore {
  /** Length in bytes. */
  size(): Promise<Checked<number>>;
  /** The bytes from `offset` on, at most `length`; fewer at the end. */
  read(offset: number, length: number): Promise<Checked<Uint8Array>>;
  /** Adds bytes at the end; resolved once they are on stable storage. */
  append(bytes: Uint8Array): Promise<Checked<null>>;
  /** Cuts the journal to its first `length` bytes, on stable storage. */
  truncate(length: number): Promise<Checked<null>>;
  close(): Promise<void>;
}
