import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { HEADER_BYTES, MARKER, matchesCheck, readHeader } from './frame.js';
import { decodeRecord, frameOf, type JournalRecord } from './records.js';
import type { JournalStore } from './store.js';

/** The record of a run: first read to its end, then added to. */
export interface Journal {
  /**
   * The next record; null at the end. A last record that was cut off is passed over, and removed from a store that is
   * mended (see `tornBytes`); a damaged record with a whole one after it is `journal-broken`.
   */
  next(): Promise<Checked<JournalRecord | null>>;
  /** Adds a record; resolved once it is on stable storage. Only after `next` gave null. */
  append(record: JournalRecord): Promise<Checked<null>>;
  /** Bytes at the end whose record was cut off. */
  readonly tornBytes: number;
  close(): Promise<void>;
}

/** `mend` cuts a torn tail off, as is needed before anything is added; without it the store stays as it is. */
export function openJournal(store: JournalStore, { mend } = { mend: true }): Journal {
  let offset = 0;
  let tornBytes = 0;
  let readToEnd = false;
  return {
    get tornBytes() {
      return tornBytes;
    },
    async next() {
      if (readToEnd) return succeed(null);
      const found = await readRecordAt(store, offset);
      if (!found.ok) return found;
      if (found.value.record !== null) {
        offset = found.value.end;
        return succeed(found.value.record);
      }
      tornBytes = found.value.tornBytes;
      if (tornBytes > 0 && mend) {
        const cut = await store.truncate(offset);
        if (!cut.ok) return cut;
      }
      readToEnd = true;
      return succeed(null);
    },
    append(record) {
      if (!readToEnd) throw new Error('a journal is read to its end before it is added to');
      return store.append(frameOf(record));
    },
    close: () => store.close(),
  };
}

type Found =
  | { readonly record: JournalRecord; readonly end: number }
  | { readonly record: null; readonly tornBytes: number };

/** The record that begins at `offset`, or the journal's end with the length of what is left of a torn record. */
async function readRecordAt(store: JournalStore, offset: number): Promise<Checked<Found>> {
  const size = await store.size();
  if (!size.ok) return size;
  const left = size.value - offset;
  if (left === 0) return succeed({ record: null, tornBytes: 0 });
  const head = await store.read(offset, HEADER_BYTES);
  if (!head.ok) return head;
  const header = readHeader(head.value);
  if (header !== null && HEADER_BYTES + header.length <= left) {
    const payload = await store.read(offset + HEADER_BYTES, header.length);
    if (!payload.ok) return payload;
    if (matchesCheck(payload.value, header.check)) {
      const record = decodeRecord(payload.value);
      if (!record.ok) return record;
      return succeed({ record: record.value, end: offset + HEADER_BYTES + header.length });
    }
  }
  const later = await wholeRecordAfter(store, offset + 1, size.value);
  if (!later.ok) return later;
  if (later.value === null) return succeed({ record: null, tornBytes: left });
  return fail('journal-broken', `The journal is damaged at byte ${offset}, before its last record.`, {
    remedy: 'Restore the journal from a copy, or submit the specification again as a new run.',
  });
}

const SCAN_BYTES = 1024 * 1024;

/** Where a whole record begins at or after `from`; null when there is none, so that what is there is a torn tail. */
async function wholeRecordAfter(
  store: JournalStore,
  from: number,
  size: number,
): Promise<Checked<number | null>> {
  const marker = Buffer.from(MARKER);
  for (let at = from; at < size; at += SCAN_BYTES) {
    const chunk = await store.read(at, SCAN_BYTES + HEADER_BYTES);
    if (!chunk.ok) return chunk;
    const bytes = Buffer.from(chunk.value.buffer, chunk.value.byteOffset, chunk.value.byteLength);
    for (
      let hit = bytes.indexOf(marker);
      hit >= 0 && hit < SCAN_BYTES;
      hit = bytes.indexOf(marker, hit + 1)
    ) {
      const header = readHeader(bytes.subarray(hit, hit + HEADER_BYTES));
      if (header === null || at + hit + HEADER_BYTES + header.length > size) continue;
      const payload = await store.read(at + hit + HEADER_BYTES, header.length);
      if (!payload.ok) return payload;
      if (matchesCheck(payload.value, header.check)) return succeed(at + hit);
    }
  }
  return succeed(null);
}
