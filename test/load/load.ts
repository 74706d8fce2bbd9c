import { writeFile } from 'node:fs/promises';
import { fileURLToPath } from 'node:url';
import { Stage } from '../support/stage.js';
import { runLoad, type Sizes } from './scenario.js';

/** `npm run load`: the whole of it, to loopback only, in some minutes. Linux: it reads memory from /proc. */
const WHOLE: Sizes = {
  rows: 1500,
  fitsBefore: 12,
  malformedFrames: 1_000_000,
  malformedLinks: 400,
  halfOpenConnections: 700,
  halfOpenLinks: 300,
  promisedLinks: 200,
  unaskedLinks: 40,
  unaskedPerLink: 5000,
  wrongTokens: 10_000,
  allAtOnce: false,
  rounds: 2,
};
const GROWN_MOST_MIB = 50;

/** `dist/test/load/load.js` from the root of the repository; the figures stay beside the benchmarks'. */
const RESULTS = fileURLToPath(new URL('../../../test/bench/results/load.json', import.meta.url));

const stage = await Stage.open('load');
try {
  const figures = await runLoad(stage, WHOLE, (line) => process.stdout.write(`${line}\n`));
  const document = { node: process.version, sizes: WHOLE, ...figures };
  await writeFile(RESULTS, `${JSON.stringify(document, null, 2)}\n`);
  const withoutCode = figures.attacks.reduce((total, { refusals }) => total + (refusals['no code'] ?? 0), 0);
  const grown = figures.grownMiB.map((grownMiB) => grownMiB.toFixed(1)).join(', then ');
  process.stdout.write(
    `Resident memory grew by ${grown} MiB at most; refusals without a code: ${withoutCode}.\n`,
  );
  if (Math.max(...figures.grownMiB) >= GROWN_MOST_MIB || withoutCode > 0) process.exitCode = 1;
} finally {
  await stage.close();
}
