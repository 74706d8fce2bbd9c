import { mkdtemp, readFile, rm, stat, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, describe, expect, test } from 'vitest';
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

test('a bearer header is read as RFC 6750 writes it', () => {
  expect(bearerOf('Bearer abc-_1')).toBe('abc-_1');
  expect(bearerOf('bearer abc')).toBe('abc');
  for (const wrong of [undefined, '', 'Bearer', 'Basic abc', 'Bearer a b'])
    expect(bearerOf(wrong)).toBeNull();
});
