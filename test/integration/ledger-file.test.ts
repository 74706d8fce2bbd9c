import { appendFile, mkdtemp, readFile, rm, stat } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, expect, test } from 'vitest';
import { type Departure, Ledger } from '../../worker/custody/ledger.js';
import { besideSiteFile, ledgerOnDisk } from '../../worker/service/site-folder.js';

let folder = '';
let file = '';

beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-ledger-'));
  file = besideSiteFile(join(folder, 'oakhythe.site.yaml'), 'ledger');
});
afterEach(() => rm(folder, { recursive: true, force: true }));

const departure = (ask: number): Departure => ({
  run: 'r1',
  digest: 'd'.repeat(64),
  ask,
  kinds: ['gradients'],
  numbers: 3,
  curvature: { all: 0, problems: new Map(), sketched: new Map() },
  content: 'c'.repeat(64),
});

async function opened() {
  const result = await Ledger.open(ledgerOnDisk(file), () => new Date('2026-03-01T09:00:00Z'));
  if (!result.ok) expect.unreachable(result.failure.message);
  return result.value;
}

test('the ledger stands beside the site file under its name', () => {
  expect(file).toBe(join(folder, 'oakhythe.ledger'));
  expect(besideSiteFile('/srv/a.b.site.yml', 'approvals')).toBe('/srv/a.b.approvals');
});

test('only the custodian can read it, and it goes on where it ended', async () => {
  const first = await opened();
  await first.ledger.append(departure(1));
  expect((await stat(file)).mode & 0o777).toBe(0o600);
  const second = await opened();
  await second.ledger.append(departure(2));
  const third = await opened();
  expect(third.ledger.departed('r1')).toMatchObject({ asks: 2, numbers: 6 });
  expect((await readFile(file, 'utf8')).trimEnd().split('\n')).toHaveLength(2);
});

test('a line cut short is taken out of the file, whatever bytes it broke at', async () => {
  const first = await opened();
  await first.ledger.append(departure(1));
  const sound = await readFile(file);
  await appendFile(file, Buffer.from([0x7b, 0x22, 0xc3]));
  const second = await opened();
  expect(second.warning).toContain('cut short');
  expect(await readFile(file)).toEqual(sound);
  expect((await second.ledger.append(departure(2))).ok).toBe(true);
  expect((await opened()).ledger.departed('r1').asks).toBe(2);
});

test('two workers on one ledger: the second line of the chain is refused, not forked', async () => {
  const one = await opened();
  const other = await opened();
  expect((await one.ledger.append(departure(1))).ok).toBe(true);
  expect(await other.ledger.append(departure(1))).toMatchObject({ failure: { code: 'ledger-broken' } });
  expect((await opened()).ledger.departed('r1').asks).toBe(1);
});

test('a worker that takes over catches up with what the one before wrote, and goes on in one chain', async () => {
  const [before, after] = [(await opened()).ledger, (await opened()).ledger];
  await before.append(departure(1));
  expect(await after.append(departure(2))).toMatchObject({ failure: { code: 'ledger-broken' } });
  expect((await after.catchUp()).ok).toBe(true);
  expect(after.look('r1', 'd'.repeat(64), 1, 'c'.repeat(64))).toEqual({ ok: true, value: 'repeat' });
  expect((await after.append(departure(2))).ok).toBe(true);
  expect((await opened()).ledger.departed('r1')).toMatchObject({ asks: 2, numbers: 6 });
});

test('a ledger that cannot be written says so', async () => {
  file = join(folder, 'nowhere', 'oakhythe.ledger');
  const { ledger } = await opened();
  expect(await ledger.append(departure(1))).toMatchObject({
    failure: { code: 'state-unwritable', where: { file } },
  });
});

test('a clock that is set back or ahead leaves a ledger that is sound', async () => {
  for (const [index, year] of ['2031', '2001', '2099'].entries()) {
    const clock = (): Date => new Date(`${year}-03-01T09:00:00Z`);
    const result = await Ledger.open(ledgerOnDisk(file), clock);
    if (!result.ok) expect.unreachable(result.failure.message);
    expect(result.value.ledger.departed('r1').asks).toBe(index);
    expect(await result.value.ledger.append(departure(index + 1))).toMatchObject({ ok: true });
  }
  const years = (await readFile(file, 'utf8')).match(/(?<="at":")\d{4}/g);
  expect(years).toEqual(['2031', '2001', '2099']);
});
