import { spawnSync } from 'node:child_process';
import { existsSync } from 'node:fs';
import { delimiter, join } from 'node:path';

/**
 * A python3 on the path that has the packages, or null: a machine may have several. CI installs the packages of Debian's
 * own; elsewhere the tests that need it are skipped, and say so.
 */
export function pythonWith(packages: readonly string[]): string | null {
  for (const folder of (process.env.PATH ?? '').split(delimiter)) {
    const python = join(folder, 'python3');
    if (folder === '' || !existsSync(python)) continue;
    const tried = spawnSync(python, ['-c', `import ${packages.join(', ')}`], { timeout: 20_000 });
    if (tried.status === 0) return python;
  }
  return null;
}

/** What a skipped test says. */
export const withoutPython = (packages: readonly string[]): string =>
  `skipped: no python3 here has the packages ${packages.join(', ')}`;
