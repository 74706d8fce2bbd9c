import { succeed } from '../../protocol/failure.js';
import type { JournalStore } from './store.js';

export interface MemoryStore extends JournalStore {
  /** A copy of what has been appended, as a crash would leave it. */
  bytes(): Uint8Array;
}

/** A journal store in memory that starts with `initial`. */
export function memoryStore(initial: Uint8Array = new Uint8Array()): MemoryStore {
  let held = initial.slice();
  return {
    bytes: () => held.slice(),
    size: async () => succeed(held.length),
    read: async (offset, length) => succeed(held.slice(offset, offset + length)),
    append: async (bytes) => {
      const grown = new Uint8Array(held.length + bytes.length);
      grown.set(held);
      grown.set(bytes, held.length);
      held = grown;
      return succeed(null);
    },
    truncate: async (length) => {
      held = held.slice(0, length);
      return succeed(null);
    },
    close: async () => {},
  };
}
