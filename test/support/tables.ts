import { mkdtempSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { expect } from 'vitest';
import type { Checked, Failure } from '../../protocol/failure.js';
import type { TableRequest } from '../../worker/source/table.js';

/** A folder of its own for one test. */
export const newFolder = (): string => mkdtempSync(join(tmpdir(), 'commonfit-tables-'));

export function writeText(folder: string, name: string, text: string | Buffer): string {
  const path = join(folder, name);
  writeFileSync(path, text);
  return path;
}

export const request = (partial: Partial<TableRequest>): TableRequest => ({
  numeric: [],
  levels: [],
  missing: 'refuse',
  shard: { index: 1, of: 1 },
  ...partial,
});

export function soundValue<T>(checked: Checked<T>): T {
  if (!checked.ok) expect.fail(`${checked.failure.code}: ${checked.failure.message}`);
  return checked.value;
}

export function failureOf<T>(checked: Checked<T>): Failure {
  if (checked.ok) expect.fail('expected a failure');
  return checked.failure;
}
