import { writeResults } from './results-file.js';
import { measureStragglers, STRAGGLER_RUNGS, type StragglerRow, TOLERANCES } from './straggler-runs.js';
import { SCENARIOS } from './straggler-scenarios.js';
import { quantile } from './summary.js';

const PROBLEMS = [
  'squared correlated lasso random 8',
  'logistic well elastic-net by-response 8',
  'logistic correlated lasso random 8',
  'logistic extreme lasso by-response 8',
  'poisson small lasso by-response 8',
  'poisson correlated ridge sizes-by-response 8',
  'huber small lasso random 8',
  'huber correlated lasso random 8',
] as const;
const SEEDS = 20;

/** `npm run bench:stragglers [-- SEEDS]`: simulated times, so they hold on any machine. */
function main(): void {
  const seeds = Number(process.argv[2] ?? SEEDS);
  if (!Number.isInteger(seeds) || seeds < 1) {
    console.error('The number of seeds is a positive whole number.');
    process.exitCode = 2;
    return;
  }
  const results: StragglerRow[] = [];
  for (const [k, name] of PROBLEMS.entries()) {
    const rows = measureStragglers(name, seeds);
    results.push(...rows);
    console.log(`${k + 1}/${PROBLEMS.length} ${name}`);
    for (const row of rows) console.log(`    ${lineOf(row)}`);
  }
  console.log(`\n${summarise(results)}`);
  if (results.some((row) => row.contradicted > 0 || row.unsolved > 0)) process.exitCode = 1;
  if (seeds < SEEDS) return;
  writeResults('stragglers', results, { seeds });
}

const lineOf = (row: StragglerRow): string =>
  `${row.rung} ${row.tolerance.toExponential(0)} ${row.scenario}: synchronous ${row.synchronous.toFixed(1)}, ` +
  `partial ${row.partial.toFixed(1)} (${row.ratio.toFixed(2)} of it); slow site ${row.answers}/${row.answersMost} answers`;

/** Medians over the problems: times in units of the run without a straggler. */
function summarise(rows: readonly StragglerRow[]): string {
  const head =
    'rung       gap    scenario       synchronous  partial  partial/synchronous  9 of 10  answers (most)';
  const lines = STRAGGLER_RUNGS.flatMap((rung) =>
    TOLERANCES.flatMap((tolerance) =>
      SCENARIOS.map((scenario) => {
        const own = rows.filter(
          (row) => row.rung === rung && row.tolerance === tolerance && row.scenario === scenario,
        );
        const middle = (of: (row: StragglerRow) => number): string => quantile(own.map(of), 0.5).toFixed(2);
        return [
          rung.padEnd(10),
          tolerance.toExponential(0),
          scenario.padEnd(14),
          middle((row) => row.synchronous).padStart(11),
          middle((row) => row.partial).padStart(8),
          middle((row) => row.ratio).padStart(20),
          quantile(
            own.map((row) => row.ratioNineOfTen),
            0.9,
          )
            .toFixed(2)
            .padStart(8),
          `${quantile(
            own.map((row) => row.answers),
            0.5,
          )} (${Math.max(...own.map((row) => row.answersMost))})`.padStart(15),
        ].join(' ');
      }),
    ),
  );
  const count = (of: (row: StragglerRow) => number): number => rows.reduce((sum, row) => sum + of(row), 0);
  return [
    head,
    ...lines,
    `unsolved ${count((row) => row.unsolved)}, certificates contradicted ${count((row) => row.contradicted)}`,
  ].join('\n');
}

main();
