import { isBaseline, METHODS, measureProblem, type Row } from './measure.js';
import { SUITE } from './problems.js';
import { writeResults } from './results-file.js';
import { summarise } from './summary.js';

/** `npm run bench:rounds [-- PART-OF-A-NAME]`: exact counts, so they hold on any machine. */
function main(): void {
  const [only] = process.argv.slice(2);
  const names = SUITE.filter((name) => only === undefined || name.includes(only));
  if (names.length === 0) {
    console.error(`No problem of the suite has "${only}" in its name.`);
    process.exitCode = 2;
    return;
  }
  const results: Row[] = [];
  for (const [k, name] of names.entries()) {
    const rows = measureProblem(name);
    results.push(...rows);
    const cells = rows.map(
      (row) => `${row.method} ${row.rounds['1e-6'] ?? '–'}/${row.rounds['1e-8'] ?? '–'}`,
    );
    console.log(`${String(k + 1).padStart(2)}/${names.length} ${name}\n      ${cells.join(' · ')}`);
  }
  console.log(`\n${summarise(results, METHODS)}`);
  if (only !== undefined) return;
  writeResults('rounds', results);
  if (results.some((row) => !isBaseline(row.method) && (row.failure !== null || row.contradicted)))
    process.exitCode = 1;
}

main();
