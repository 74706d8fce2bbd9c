import { createHash } from 'node:crypto';
import { mkdtemp, readFile, rm, stat, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
import { openTokenUses, readTokenUses } from '../../coordinator/service/token-uses.js';
import { bearerOf, openTokens } from '../../coordinator/service/tokens.js';

let folder = '';
beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-tokens-'));
});
afterEach(() => rm(folder, { recursive: true }));

const HARROWMERE = { kind: 'site', name: 'harrowmere' } as const;

async function issued(holder: Parameters<ReturnType<typeof openTokens>['issue']>[0]): Promise<string> {
  const token = await openTokens(folder).issue(holder);
  if (!token.ok) throw new Error(token.failure.message);
  return token.value;
}

describe('tokens', () => {
  test('a token speaks for its holder, any other string for nobody', async () => {
    const token = await issued(HARROWMERE);
    const tokens = openTokens(folder);
    expect(tokens.holderOf(token)).toEqual({ ok: true, value: HARROWMERE });
    for (const wrong of ['', token.slice(1), `${token}A`, 'x'.repeat(1e6)]) {
      expect(tokens.holderOf(wrong)).toEqual({ ok: true, value: null });
    }
  });

  test('the file holds no token and is for its owner only', async () => {
    const token = await issued(HARROWMERE);
    const path = join(folder, 'tokens.json');
    expect(await readFile(path, 'utf8')).not.toContain(token);
    expect((await stat(path)).mode & 0o777).toBe(0o600);
    expect(Buffer.from(token, 'base64url')).toHaveLength(32);
  });

  test('a new token of the same holder voids the one before; of another, it does not', async () => {
    const first = await issued(HARROWMERE);
    const other = await issued({ kind: 'analyst', name: 'harrowmere' });
    const second = await issued(HARROWMERE);
    const tokens = openTokens(folder);
    expect(tokens.holderOf(first)).toEqual({ ok: true, value: null });
    expect(tokens.holderOf(second)).toMatchObject({ value: { kind: 'site' } });
    expect(tokens.holderOf(other)).toMatchObject({ value: { kind: 'analyst' } });
  });

  test('a token issued by another process is known at once', async () => {
    const running = openTokens(folder);
    await issued(HARROWMERE);
    expect(running.holderOf('unknown')).toMatchObject({ ok: true });
    const token = await issued({ kind: 'site', name: 'oakhythe' });
    expect(running.holderOf(token)).toMatchObject({ value: { name: 'oakhythe' } });
  });

  test('tokens issued at the same time are all kept', async () => {
    const names = ['castlefen', 'harrowmere', 'lindell-bay', 'oakhythe'];
    await Promise.all(names.map((name) => issued({ kind: 'site', name })));
    const holders = openTokens(folder).holders();
    expect(holders.ok && holders.value.map(({ name }) => name).sort()).toEqual(names);
  });

  test('a damaged file lets nobody in', async () => {
    const token = await issued(HARROWMERE);
    await writeFile(join(folder, 'tokens.json'), '{"format": 1');
    expect(openTokens(folder).holderOf(token)).toMatchObject({
      ok: false,
      failure: { code: 'file-unreadable' },
    });
  });
});

describe('terms', () => {
  const NOON = Date.parse('2031-05-04T12:00:00Z');
  const HOUR_MS = 3_600_000;

  async function lasting(lastsMs: number | null): Promise<string> {
    const tokens = openTokens(folder, { now: () => NOON });
    const token = await tokens.issue(HARROWMERE, { lastsMs, may: 'submit' });
    if (!token.ok) throw new Error(token.failure.message);
    return token.value;
  }
  const at = (ms: number, token: string) => openTokens(folder, { now: () => ms }).holderOf(token);

  test('a token that expires is good up to its last moment, then refused with that moment', async () => {
    const token = await lasting(HOUR_MS);
    expect(at(NOON + HOUR_MS - 1, token)).toEqual({ ok: true, value: HARROWMERE });
    expect(at(NOON + HOUR_MS, token)).toMatchObject({
      ok: false,
      failure: {
        code: 'token-refused',
        message: 'The token of site harrowmere expired on 2031-05-04 13:00 UTC.',
      },
    });
  });

  test('a token without an end is good for ever', async () => {
    const token = await lasting(null);
    expect(at(NOON + 1e6 * HOUR_MS, token)).toEqual({ ok: true, value: HARROWMERE });
  });

  test('a revoked token speaks for nobody; another holder of the name keeps theirs', async () => {
    const site = await issued(HARROWMERE);
    const analyst = await issued({ kind: 'analyst', name: 'harrowmere' });
    const tokens = openTokens(folder);
    expect(await tokens.revoke(HARROWMERE)).toEqual({ ok: true, value: true });
    expect(tokens.holderOf(site)).toEqual({ ok: true, value: null });
    expect(tokens.holderOf(analyst)).toMatchObject({ value: { kind: 'analyst' } });
    expect(await tokens.revoke(HARROWMERE)).toEqual({ ok: true, value: false });
    expect((await stat(join(folder, 'tokens.json'))).mode & 0o777).toBe(0o600);
  });

  test('nothing is made where there is nothing to revoke', async () => {
    const nowhere = join(folder, 'nowhere');
    expect(await openTokens(nowhere).revoke(HARROWMERE)).toEqual({ ok: true, value: false });
    await expect(stat(nowhere)).rejects.toThrow('ENOENT');
  });

  test('an analyst may submit unless told to watch', async () => {
    const ines = await issued({ kind: 'analyst', name: 'ines' });
    const tokens = openTokens(folder);
    const omar = await tokens.issue({ kind: 'analyst', name: 'omar' }, { lastsMs: null, may: 'watch' });
    expect(tokens.holderOf(ines)).toMatchObject({ value: { name: 'ines', may: 'submit' } });
    expect(omar.ok && tokens.holderOf(omar.value)).toMatchObject({ value: { name: 'omar', may: 'watch' } });
  });

  test('a file of format 1 is read: its tokens do not expire, its analysts may submit', async () => {
    const sha256 = createHash('sha256').update('old-token').digest('hex');
    const tokens = [{ kind: 'analyst', name: 'ines', sha256, issuedAt: '2030-01-01T00:00:00.000Z' }];
    await writeFile(join(folder, 'tokens.json'), JSON.stringify({ format: 1, tokens }));
    expect(at(NOON, 'old-token')).toEqual({
      ok: true,
      value: { kind: 'analyst', name: 'ines', may: 'submit' },
    });
    await issued(HARROWMERE);
    expect(at(NOON, 'old-token')).toMatchObject({ ok: true, value: { name: 'ines' } });
  });
});

describe('the record of uses', () => {
  test('holds digests and times, to the minute, for the owner only; unknown tokens leave no trace', async () => {
    let nowMs = Date.parse('2031-05-04T12:00:00Z');
    const uses = openTokenUses(
      folder,
      () => nowMs,
      () => {},
    );
    const tokens = openTokens(folder, { onUse: uses.note });
    const token = await issued(HARROWMERE);
    expect(await readTokenUses(folder)).toEqual({ ok: true, value: new Map() });
    for (const ms of [0, 30_000, 90_000]) {
      nowMs = Date.parse('2031-05-04T12:00:00Z') + ms;
      tokens.holderOf(token);
      tokens.holderOf('unknown');
      await uses.settled();
      const read = await readTokenUses(folder);
      expect(read.ok && [...read.value.values()]).toEqual([
        ms < 60_000 ? '2031-05-04T12:00:00.000Z' : '2031-05-04T12:01:30.000Z',
      ]);
    }
    const path = join(folder, 'token-uses.json');
    expect(await readFile(path, 'utf8')).not.toContain(token);
    expect((await stat(path)).mode & 0o777).toBe(0o600);
  });
});

test('a bearer header is read as RFC 6750 writes it', () => {
  expect(bearerOf('Bearer abc-_1')).toBe('abc-_1');
  expect(bearerOf('bearer abc')).toBe('abc');
  for (const wrong of [undefined, '', 'Bearer', 'Basic abc', 'Bearer a b'])
    expect(bearerOf(wrong)).toBeNull();
});
