import { describe, expect, test } from 'vitest';
import { type Departure, Ledger, readLedger, recordLine, verifyLine } from '../../worker/custody/ledger.js';
import { curvatureTotal } from '../../worker/custody/policy.js';
import { MemoryLedgerFile } from '../support/worker-site.js';

const AT = new Date('2026-03-01T09:00:00Z');
const DIGEST = 'd'.repeat(64);
const content = (digit: string): string => digit.repeat(64);

const departure = (more: Partial<Departure> = {}): Departure => ({
  run: 'r1',
  digest: DIGEST,
  ask: 1,
  kinds: ['proximal'],
  numbers: 4,
  curvature: { all: 0, problems: new Map(), sketched: new Map() },
  content: content('1'),
  ...more,
});

async function opened(file: MemoryLedgerFile): Promise<{ ledger: Ledger; warning: string | null }> {
  const result = await Ledger.open(file, () => AT);
  if (!result.ok) expect.unreachable(result.failure.message);
  return result.value;
}

/** A ledger of three lines. */
async function written(): Promise<MemoryLedgerFile> {
  const file = new MemoryLedgerFile();
  const { ledger } = await opened(file);
  const matrices = { all: 0, problems: new Map([[0, 2]]), sketched: new Map([[0, 8]]) };
  await ledger.append(departure());
  await ledger.append(departure({ ask: 2, numbers: 30, content: content('2'), curvature: matrices }));
  await ledger.append(departure({ run: 'r2', content: content('3') }));
  return file;
}

describe('after a restart', () => {
  test('what left in each run is counted as before', async () => {
    const { ledger, warning } = await opened(await written());
    expect(warning).toBeNull();
    expect(ledger.departed('r1')).toMatchObject({ asks: 2, numbers: 34 });
    expect(curvatureTotal(ledger.departed('r1').curvature)).toBe(2);
    expect(ledger.departed('r1').curvature.sketched).toEqual(new Map([[0, 8]]));
    expect(ledger.departed('r2').numbers).toBe(4);
    expect(ledger.departed('r3').asks).toBe(0);
  });

  test('new lines follow the old ones in one unbroken chain', async () => {
    const file = await written();
    const { ledger } = await opened(file);
    await ledger.append(departure({ ask: 3 }));
    const read = readLedger(file.text, file.name);
    expect(read.ok && read.value.records.map(({ run, ask }) => `${run} ${ask}`)).toEqual([
      'r1 1',
      'r1 2',
      'r2 1',
      'r1 3',
    ]);
  });

  test('a repeat is known as one; other content under the same ask is ask-changed', async () => {
    const { ledger } = await opened(await written());
    expect(ledger.look('r1', DIGEST, 2, content('2'))).toEqual({ ok: true, value: 'repeat' });
    expect(ledger.look('r1', DIGEST, 3, content('9'))).toEqual({ ok: true, value: 'new' });
    expect(ledger.look('r1', DIGEST, 2, content('9'))).toMatchObject({ failure: { code: 'ask-changed' } });
  });

  test('a run cannot change its specification', async () => {
    const { ledger } = await opened(await written());
    expect(ledger.look('r1', 'e'.repeat(64), 3, content('9'))).toMatchObject({
      failure: { code: 'ask-changed' },
    });
  });
});

describe('a file that was tampered with', () => {
  const openingOf = async (change: (lines: string[]) => string[]) => {
    const file = await written();
    const lines = file.text.trimEnd().split('\n');
    return Ledger.open(new MemoryLedgerFile(`${change(lines).join('\n')}\n`), () => AT);
  };

  test.each<[string, number, (lines: string[]) => string[]]>([
    ['a number changed', 2, (lines) => [lines[0], lines[1].replace('"numbers":30', '"numbers":3'), lines[2]]],
    ['a line taken out', 2, (lines) => [lines[0], lines[2]]],
    ['two lines swapped', 2, (lines) => [lines[0], lines[2], lines[1]]],
    ['the first line taken out', 1, (lines) => lines.slice(1)],
    ['a line put twice', 2, (lines) => [lines[0], lines[0], lines[1], lines[2]]],
    ['a line of another kind', 3, (lines) => [lines[0], lines[1], '{"note":"all well"}', lines[2]]],
    ['an empty line', 2, (lines) => [lines[0], '', lines[1], lines[2]]],
  ])('%s: ledger-broken at line %i', async (_name, line, change) => {
    expect(await openingOf(change)).toMatchObject({
      ok: false,
      failure: { code: 'ledger-broken', where: { file: 'castlefen.ledger', line } },
    });
  });

  test('a line forged with a hash of its own does not fit the chain', () => {
    const forged = recordLine(departure({ numbers: 1 }), AT, 'f'.repeat(64)).line;
    expect(verifyLine(forged, '0'.repeat(64))).toMatchObject({ failure: { code: 'ledger-broken' } });
  });
});

test('a last line cut short anywhere is mended with a warning, and its ask counts as not answered', async () => {
  const whole = (await written()).text;
  const sound = whole.slice(0, whole.trimEnd().lastIndexOf('\n') + 1);
  for (const length of [1, 40, whole.length - sound.length - 1]) {
    const file = new MemoryLedgerFile(whole.slice(0, sound.length + length));
    const { ledger, warning } = await opened(file);
    expect(warning).toContain('cut short');
    expect(file.text).toBe(sound);
    expect(ledger.departed('r2').asks).toBe(0);
    expect(ledger.departed('r1').asks).toBe(2);
    await ledger.append(departure({ run: 'r2', content: content('3') }));
    expect(file.text).toBe(whole);
  }
});

test('a failed write counts nothing', async () => {
  const file = new MemoryLedgerFile();
  const { ledger } = await opened(file);
  file.append = async () => ({ ok: false, failure: { code: 'state-unwritable', message: 'full' } });
  expect((await ledger.append(departure())).ok).toBe(false);
  expect(ledger.departed('r1').asks).toBe(0);
});
