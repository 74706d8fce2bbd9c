import { execFileSync } from 'node:child_process';
import { mkdirSync, writeFileSync } from 'node:fs';
import { dirname, join } from 'node:path';
import { fileURLToPath } from 'node:url';

const root = join(dirname(fileURLToPath(import.meta.url)), '../../..');

/** Writes `test/bench/results/NAME.json`: the Node and commit it was measured with, what is said `beside` it, and the results. */
export function writeResults(name: string, results: readonly object[], beside: object = {}): void {
  const file = `test/bench/results/${name}.json`;
  const path = join(root, file);
  mkdirSync(dirname(path), { recursive: true });
  const document = { node: process.version, commit: commit(), ...beside, results };
  writeFileSync(path, `${JSON.stringify(document, null, 1)}\n`);
  process.stdout.write(`\nWritten to ${file}\n`);
}

/** Time of this process on a processor, all its threads. Milliseconds. */
export function cpuMs(): number {
  const { user, system } = process.cpuUsage();
  return (user + system) / 1000;
}

function commit(): string | null {
  try {
    return execFileSync('git', ['rev-parse', 'HEAD'], {
      cwd: root,
      encoding: 'utf8',
      stdio: ['ignore', 'pipe', 'ignore'],
    }).trim();
  } catch {
    return null;
  }
}
