import { mkdtemp, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import { fileStore } from '../../coordinator/journal/file-store.js';
import { openJournal } from '../../coordinator/journal/journal.js';
import { memoryStore } from '../../coordinator/journal/memory-store.js';
import {
  decodeReply,
  digestOfAsk,
  encodeReply,
  type JournalRecord,
} from '../../coordinator/journal/records.js';
import type { JournalStore } from '../../coordinator/journal/store.js';

const answered = (ask: number): JournalRecord => ({
  record: 'answered',
  ask,
  asked: 'a'.repeat(64),
  replies: [Uint8Array.of(ask, 2, 3), null],
  agesMs: [2, 30],
  gone: [],
  measured: { tookMs: 1.5, slowest: { member: 0, ms: 1.5 }, numbersUp: 3, numbersDown: 4, at: 'then' },
});
const RECORDS: JournalRecord[] = [
  {
    record: 'opened',
    format: 1,
    run: 'r',
    specification: '{}',
    digest: 'd',
    roster: [{ site: 'harrowmere', shard: { index: 1, of: 1 }, kernel: 'k' }],
    startFrom: null,
    software: 's',
    node: 'v20',
  },
  answered(1),
  answered(2),
];

async function readAll(store: JournalStore) {
  const journal = openJournal(store);
  const records: JournalRecord[] = [];
  for (;;) {
    const next = await journal.next();
    if (!next.ok) return { records, code: next.failure.code, journal };
    if (next.value === null) return { records, code: null, journal };
    records.push(next.value);
  }
}

async function written(records = RECORDS) {
  const store = memoryStore();
  const { journal } = await readAll(store);
  const ends: number[] = [];
  for (const record of records) {
    expect(await journal.append(record)).toMatchObject({ ok: true });
    ends.push(store.bytes().length);
  }
  return { bytes: store.bytes(), ends };
}

describe('journal', () => {
  test('gives back what was appended, in order', async () => {
    const { bytes } = await written();
    expect(await readAll(memoryStore(bytes))).toMatchObject({ records: RECORDS, code: null });
  });

  test('cut off at any byte: the whole records stand, the torn one is removed, and appending goes on', async () => {
    const { bytes, ends } = await written();
    for (let length = 0; length <= bytes.length; length++) {
      const store = memoryStore(bytes.slice(0, length));
      const { records, code, journal } = await readAll(store);
      const whole = ends.filter((end) => end <= length);
      expect(code).toBeNull();
      expect(records).toEqual(RECORDS.slice(0, whole.length));
      expect(journal.tornBytes).toBe(length - (whole.at(-1) ?? 0));
      await journal.append(answered(9));
      expect((await readAll(memoryStore(store.bytes()))).records).toEqual([...records, answered(9)]);
    }
  });

  test('any byte changed before the last record is journal-broken; in the last one it is a torn record', async () => {
    const { bytes, ends } = await written();
    for (let at = 0; at < bytes.length; at++) {
      const damaged = bytes.slice();
      damaged[at] ^= 0x41;
      const { records, code } = await readAll(memoryStore(damaged));
      const before = ends.filter((end) => end <= at).length;
      expect(records).toEqual(RECORDS.slice(0, before));
      expect(code).toBe(before === RECORDS.length - 1 ? null : 'journal-broken');
    }
  });

  test('adding before reading to the end is a defect', () => {
    expect(() => openJournal(memoryStore()).append(answered(1))).toThrow(/read to its end/);
  });
});

describe('journal on a file', () => {
  let folder = '';
  beforeEach(async () => {
    folder = await mkdtemp(join(tmpdir(), 'commonfit-journal-'));
  });
  afterEach(() => rm(folder, { recursive: true }));

  test('keeps records over a restart and removes a torn one from the file', async () => {
    const { bytes, ends } = await written();
    const path = join(folder, 'journal');
    await writeFile(path, bytes.slice(0, bytes.length - 3));
    const store = await fileStore(path);
    if (!store.ok) throw new Error(store.failure.message);
    const { records, journal } = await readAll(store.value);
    expect(records).toEqual(RECORDS.slice(0, 2));
    expect(await store.value.size()).toEqual({ ok: true, value: ends[1] });
    await journal.append(answered(2));
    await journal.close();
    const again = await fileStore(path);
    if (!again.ok) throw new Error(again.failure.message);
    expect((await readAll(again.value)).records).toEqual(RECORDS);
    await again.value.close();
  });

  test('a folder that is not there is state-unwritable', async () => {
    expect(await fileStore(join(folder, 'none', 'journal'))).toMatchObject({
      ok: false,
      failure: { code: 'state-unwritable' },
    });
  });
});

describe('replies in the journal', () => {
  test('a vector comes back with every bit', () => {
    const point = Float64Array.of(-0, 5e-324, Math.PI, -1.7976931348623157e308, 0.1 + 0.2);
    const bytes = encodeReply('r', 4, [
      { work: 'proximal', problems: [{ problem: 0, point, newtonSteps: 2 }] },
    ]);
    const back = decodeReply('r', 4, bytes);
    if (!back.ok || 'code' in back.value || back.value[0].work !== 'proximal')
      throw new Error('not an answer');
    expect(Buffer.from(back.value[0].problems[0].point.buffer)).toEqual(Buffer.from(point.buffer));
  });

  test('a reply to another ask is refused', () => {
    const bytes = encodeReply('r', 4, [{ work: 'factor', factors: [Float64Array.of(1)] }]);
    expect(decodeReply('r', 5, bytes)).toMatchObject({ ok: false, failure: { code: 'journal-broken' } });
    expect(decodeReply('q', 4, bytes)).toMatchObject({ ok: false, failure: { code: 'journal-broken' } });
  });

  test('the digest of an ask sees one bit of one vector', () => {
    const works = (value: number) =>
      [
        [
          {
            work: 'evaluate',
            problem: 0,
            part: null,
            points: [{ point: Float64Array.of(value), want: 'value' }],
            ownFit: null,
            sketch: null,
          },
        ],
      ] as Parameters<typeof digestOfAsk>[2];
    expect(digestOfAsk('r', 1, works(1))).toBe(digestOfAsk('r', 1, works(1)));
    expect(digestOfAsk('r', 1, works(1))).not.toBe(digestOfAsk('r', 1, works(1 + Number.EPSILON)));
    expect(digestOfAsk('r', 1, works(0))).not.toBe(digestOfAsk('r', 1, works(-0)));
  });
});
