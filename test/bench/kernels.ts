import { loadavg } from 'node:os';
import { type KernelTime, kernelTimes } from './kernel-times.js';
import { cpuMs, writeResults } from './results-file.js';

/** `npm run bench:kernels`: the compiled kernels against this machine's own limits and against the plain twin. */
const REPEATS = 7;
/** Two threads are only as fast as they can be while nothing else runs: many tries, of which the quickest counts. */
const THREAD_REPEATS = 15;

/** What is to be reached, by the beginning of the name; of the other figures nothing is promised. */
const TARGETS = [
  ['weighted Gram', 0.7],
  ['y = Xb 1e5', 0.75],
  ['Xᵀr 1e5', 0.75],
  ['logistic loss and gradient 1e5', 0.6],
] as const;
/** What two threads are to reach over one, wherever a single one has a target. */
const THREADS_TARGET = 1.8;

const load = [loadavg()[0]];
const results = await kernelTimes(
  { rows: 1, repeats: REPEATS, threadRepeats: THREAD_REPEATS },
  { cpuMs, wallMs: () => performance.now() },
);
load.push(loadavg()[0]);
for (const time of results) process.stdout.write(`${lineOf(time)}\n`);
// of the machine over a minute, before and after: every other process takes from what two threads can reach
const loads = load.map((value) => Number(value.toFixed(2)));
process.stdout.write(`Load of the machine: ${loads.join(' before, ')} after.\n`);
const counts = { repeats: REPEATS, threadRepeats: THREAD_REPEATS };
writeResults('kernels', results.map(withTarget), { ...counts, load: loads });

function withTarget(time: KernelTime): KernelTime & { readonly target: number | null } {
  const alone = TARGETS.find(([name]) => time.name.startsWith(name))?.[1] ?? null;
  return { ...time, target: alone === null || time.threads === 1 ? alone : THREADS_TARGET };
}

function lineOf(time: KernelTime): string {
  const { target, limit, timesPlain } = withTarget(time);
  const unit = time.name.includes('Gram') || limit === 'multiply-add' ? 'GFLOP/s' : 'GB/s';
  const rates = `${time.rate.toFixed(1)} of ${time.rateOfLimit.toFixed(1)} ${unit}`;
  const wanted =
    target === null ? '' : time.ratio >= target ? `, at least ${target} wanted` : `, MISSES ${target}`;
  const plain = timesPlain === null ? '' : `; plain takes ${timesPlain.toFixed(1)} times as long`;
  return `${time.kernel.padEnd(8)}${time.name.padEnd(60)}${time.ratio.toFixed(2)} (${rates})${wanted}${plain}`;
}
