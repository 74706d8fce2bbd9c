import { loadavg } from 'node:os';
import { kernelVariant } from '../../worker/service/kernel-file.js';
import { cpuMs, writeResults } from './results-file.js';
import { MILLION, measureSparseFit } from './sparse-fit.js';
import { sparseTimes } from './sparse-times.js';

/**
 * `npm run bench:sparse`: rows by their entries against the same rows in full, on this machine's kernel; and a lasso of a
 * million columns at eight sites, from the tables to a certified 1e-4 (`-- passes` leaves it out).
 */
const variant = await kernelVariant('simd', () => undefined);
if (!variant.ok) throw new Error(variant.failure.message);
const results: object[] = [];
for (const time of sparseTimes(variant.value, { repeats: 9 }, cpuMs)) {
  const { name, ratio, nanosecondsPerEntry } = time;
  process.stdout.write(
    `${name.padEnd(50)}${ratio.toFixed(2)} of the time in full, ${nanosecondsPerEntry.toFixed(1)} ns an entry\n`,
  );
  results.push(time);
}
if (!process.argv.includes('passes')) {
  const fit = await measureSparseFit('logistic lasso, p = 1e6, 8 sites', MILLION, 7_200_000);
  process.stdout.write(`${JSON.stringify(fit, null, 1)}\n`);
  results.push(fit);
}
process.stdout.write(`Load of the machine: ${loadavg()[0].toFixed(1)}\n`);
writeResults('sparse', results);
