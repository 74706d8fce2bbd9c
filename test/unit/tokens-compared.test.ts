import { mkdtemp, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterEach, beforeEach, expect, test, vi } from 'vitest';
import { openTokens } from '../../coordinator/service/tokens.js';

/** How a token that was shown is compared with those there are: what an observer could time. */
const compared = vi.hoisted(() => ({ lengths: [] as number[] }));
vi.mock('node:crypto', async (original) => {
  const crypto = await original<typeof import('node:crypto')>();
  return {
    ...crypto,
    timingSafeEqual: (a: Uint8Array, b: Uint8Array) => {
      compared.lengths.push(a.length);
      return crypto.timingSafeEqual(a, b);
    },
  };
});

let folder = '';
beforeEach(async () => {
  folder = await mkdtemp(join(tmpdir(), 'commonfit-tokens-'));
});
afterEach(() => rm(folder, { recursive: true }));

test('digests are compared in constant time, all of them, whether the first fits, the last or none', async () => {
  const tokens = openTokens(folder);
  const shown: string[] = ['never-issued'];
  for (const name of ['harrowmere', 'castlefen', 'oakhythe']) {
    const issued = await tokens.issue({ kind: 'site', name });
    if (!issued.ok) throw new Error(issued.failure.message);
    shown.push(issued.value);
  }
  for (const token of shown) {
    compared.lengths = [];
    tokens.holderOf(token);
    expect(compared.lengths).toEqual([32, 32, 32]);
  }
});
