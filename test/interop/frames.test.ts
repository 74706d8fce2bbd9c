/** The frames kept in test/reference/frames are those that another CBOR implementation writes and reads. */
import { spawnSync } from 'node:child_process';
import { fileURLToPath } from 'node:url';
import { expect, test } from 'vitest';
import { pythonWith, withoutPython } from '../support/python.js';

const PACKAGES = ['cbor2'];
const python = pythonWith(PACKAGES);
const skipped = python === null ? ` (${withoutPython(PACKAGES)})` : '';

test.skipIf(python === null)(`cbor2 writes and reads the reference frames by the byte${skipped}`, () => {
  const script = fileURLToPath(new URL('../reference/frames/make.py', import.meta.url));
  const checked = spawnSync(python ?? '', [script, '--check'], { encoding: 'utf8', timeout: 20_000 });
  expect(checked.stderr).toBe('');
  expect(checked.status).toBe(0);
  expect(checked.stdout).toBe('7 frames checked\n');
});
