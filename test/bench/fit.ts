import { availableParallelism } from 'node:os';
import { FIT_PROBLEMS } from './fit-problems.js';
import { type FitTimes, GAP_MOST, hasPooledFit, measureFit } from './fit-runs.js';
import { writeResults } from './results-file.js';

const REPEATS = 3;

/**
 * `npm run bench:fit [-- WORD]`: whole fits through a coordinator and two workers in processes of their own, in alternation
 * with the pooled fit of the same rows where Rscript with glmnet is there. With a word, the problems with it in their name.
 */
async function main(): Promise<void> {
  const word = process.argv[2] ?? '';
  const problems = FIT_PROBLEMS.filter(({ name }) => name.includes(word));
  if (problems.length === 0) {
    console.error(
      `No problem has "${word}" in its name: ${FIT_PROBLEMS.map(({ name }) => name).join('; ')}.`,
    );
    process.exitCode = 2;
    return;
  }
  const pooled = hasPooledFit();
  if (!pooled)
    console.log('Without Rscript and its package glmnet there is no pooled fit to time beside ours.');
  const results: FitTimes[] = [];
  for (const problem of problems) {
    results.push(await measureFit(problem, REPEATS, pooled));
    console.log(lineOf(results[results.length - 1]));
  }
  if (word !== '' || !pooled) return;
  writeResults('fit', results, { cores: availableParallelism(), repeats: REPEATS, gapMost: GAP_MOST });
}

const lineOf = (row: FitTimes): string =>
  [
    `${row.name}: ${row.rounds} rounds to ${row.gap.toExponential(1)}, ${row.seconds.toFixed(2)} s`,
    row.ratio === null
      ? null
      : `${row.ratio.toFixed(2)} × ${row.pooledMethod} (${row.pooledSeconds?.toFixed(2)} s, gap ${row.pooledGap?.toExponential(1)})`,
    `with loading ${row.secondsWithLoading.toFixed(2)} s`,
    row.ratioWithLoading === null
      ? null
      : `${row.ratioWithLoading.toFixed(2)} × (${row.pooledSecondsWithLoading?.toFixed(2)} s)`,
  ]
    .filter((part) => part !== null)
    .join('; ');

await main();
