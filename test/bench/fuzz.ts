import { mkdirSync, writeFileSync } from 'node:fs';
import { dirname, join } from 'node:path';
import { fileURLToPath } from 'node:url';
import { ADVERSARIAL, makeAdversarialProblem } from './adversarial-problems.js';
import { FUZZ_RUNGS, type FuzzRow, type FuzzRung, fuzzProblem, type Verdict } from './fuzz-case.js';
import { makeFuzzProblem } from './random-problems.js';
import { spread } from './summary.js';

const SEEDS = [1, 300] as const;
const WRONG: readonly Verdict[] = ['contradicted', 'thrown', 'unnamed'];

/** `npm run bench:fuzz [-- FROM TO]`: random problems by seed, then the adversarial ones. */
function main(): void {
  const [from, to] = process.argv.slice(2).map(Number);
  const [first, last] = from === undefined ? SEEDS : [from, to ?? from];
  if (!Number.isInteger(first) || !Number.isInteger(last) || first > last) {
    console.error('Give two whole numbers, the first and the last seed, or none.');
    process.exitCode = 2;
    return;
  }
  const seeds = Array.from({ length: last - first + 1 }, (_, k) => first + k);
  const sets = {
    random: seeds.flatMap((seed) => fuzzProblem(makeFuzzProblem(seed))),
    adversarial: Object.keys(ADVERSARIAL).flatMap((name) => fuzzProblem(makeAdversarialProblem(name))),
  };
  for (const [name, rows] of Object.entries(sets)) console.log(`${report(name, rows)}\n`);
  const all = [...sets.random, ...sets.adversarial];
  if (from === undefined) write(sets);
  if (all.some((row) => WRONG.includes(row.verdict))) process.exitCode = 1;
}

function report(name: string, rows: readonly FuzzRow[]): string {
  const problems = new Map(rows.map((row) => [row.problem, row]));
  const unverified = [...problems.values()].filter((row) => !row.verified && row.nature !== 'separable');
  const lines = [`${name}: ${problems.size} problems, optimum not verified for ${unverified.length}`];
  for (const rung of Object.keys(FUZZ_RUNGS) as FuzzRung[]) {
    const own = rows.filter((row) => row.rung === rung);
    if (own.length === 0) continue;
    const count = (verdict: Verdict): number => own.filter((row) => row.verdict === verdict).length;
    const certified = own.filter((row) => row.verdict === 'certified');
    const several = certified.filter((row) => row.nature === 'rank-deficient').length;
    const gaps = certified.map((row) => row.gap ?? 0);
    lines.push(
      `  ${rung}: ${count('certified')} certified (${several} with more than one optimum), ${count('named')} ended with a name, ${count('contradicted')} contradicted, ` +
        `${count('estimate')} estimates too small, ${count('thrown')} thrown, ${count('unnamed')} unnamed`,
      `    rounds where certified: ${spread(certified.map((row) => row.rounds))}; worst true gap ${Math.max(0, ...gaps).toExponential(1)}`,
    );
  }
  const told = rows.filter((row) => row.verdict !== 'certified');
  return [...lines, ...told.map(tell)].join('\n');
}

const tell = (row: FuzzRow): string =>
  `  ${row.verdict}: ${row.rung}, ${row.problem}: ${row.outcome}` +
  `${row.reason === null ? '' : `, ${row.reason}`}` +
  ` (${row.rounds ?? '–'} rounds, true gap ${row.gap?.toExponential(1) ?? '–'}, reference ${row.nature})`;

function write(sets: Readonly<Record<string, readonly FuzzRow[]>>): void {
  const file = join(dirname(fileURLToPath(import.meta.url)), '../../../test/bench/results/fuzz.json');
  mkdirSync(dirname(file), { recursive: true });
  writeFileSync(file, `${JSON.stringify({ node: process.version, ...sets }, null, 1)}\n`);
  console.log('Written to test/bench/results/fuzz.json');
}

main();
