import { execFileSync } from 'node:child_process';
import { mkdirSync, writeFileSync } from 'node:fs';
import { dirname, join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { type KernelTime, kernelTimes } from './kernel-times.js';

/** `npm run bench:kernels`: the compiled kernels against this machine's own limits and against the plain twin. */
const root = join(dirname(fileURLToPath(import.meta.url)), '../../..');
const REPEATS = 7;

/** What is to be reached, by the beginning of the name; of the other figures nothing is promised. */
const TARGETS = [
  ['weighted Gram', 0.7],
  ['y = Xb 1e5', 0.75],
  ['Xᵀr 1e5', 0.75],
  ['logistic loss and gradient 1e', 0.6],
] as const;

const results = await kernelTimes({ rows: 1, repeats: REPEATS }, cpuMs);
for (const time of results) process.stdout.write(`${lineOf(time)}\n`);
const file = join(root, 'test/bench/results/kernels.json');
mkdirSync(dirname(file), { recursive: true });
const document = {
  node: process.version,
  commit: commit(),
  repeats: REPEATS,
  results: results.map(withTarget),
};
writeFileSync(file, `${JSON.stringify(document, null, 1)}\n`);

/** Time of this process on a processor: other work on the machine counts only as far as it takes memory bandwidth. */
function cpuMs(): number {
  const { user, system } = process.cpuUsage();
  return (user + system) / 1000;
}

function withTarget(time: KernelTime): KernelTime & { readonly target: number | null } {
  const target = TARGETS.find(([name]) => time.name.startsWith(name))?.[1] ?? null;
  return { ...time, target };
}

function lineOf(time: KernelTime): string {
  const { target } = withTarget(time);
  const unit = time.limit === 'memory read' ? 'GB/s' : 'GFLOP/s';
  const rates = `${time.rate.toFixed(1)} of ${time.rateOfLimit.toFixed(1)} ${unit}`;
  const wanted =
    target === null ? '' : time.ratio >= target ? `, at least ${target} wanted` : `, MISSES ${target}`;
  return `${time.kernel.padEnd(8)}${time.name.padEnd(46)}${time.ratio.toFixed(2)} (${rates})${wanted}; plain takes ${time.timesPlain.toFixed(1)} times as long`;
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
