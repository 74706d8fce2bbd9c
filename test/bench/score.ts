import { mkdtempSync, rmSync, statSync } from 'node:fs';
import { availableParallelism, tmpdir } from 'node:os';
import { join } from 'node:path';
import { INVERSE_LINKS, type ModelDocument } from '../../protocol/model/model-document.js';
import type { Term } from '../../protocol/specification/types.js';
import type { ScoreFormat } from '../../worker/score/score-relation.js';
import { scoreTable } from '../../worker/score/score-table.js';
import { openEngine, sqlText } from '../../worker/source/duckdb.js';
import { writeResults } from './results-file.js';

/**
 * `npm run bench:score [-- ROWS]`: rows a second of `commonfit-worker score` at p = 20, in alternation with DuckDB
 * reading the same columns (sums of them) in this process, on two threads. A Poisson model with an exposure.
 */
const P = 20;
const REPEATS = 5;
const THREADS = 2;

interface Timing {
  readonly from: ScoreFormat;
  readonly to: ScoreFormat;
  readonly rowsPerSecond: number;
  readonly readOnlyRowsPerSecond: number;
  /** Median over the repeats of score time / read time. */
  readonly ratioToReading: number;
  /** Of all threads, user and system, start and end of the engine included. */
  readonly cpuSecondsPerMillionRows: number;
  readonly residentMegabytesMost: number;
}

const numeric = (name: string, transform: 'none' | 'log'): Term => ({
  kind: 'numeric',
  column: name,
  unit: null,
  transform,
  name,
});

function modelOf(): ModelDocument {
  const terms = Array.from({ length: P }, (_, j) => numeric(`x${j}`, j % 10 === 9 ? 'log' : 'none'));
  return {
    commonfitModel: 1,
    title: 'bench',
    specification: '0'.repeat(64),
    software: 'bench',
    sites: ['harrowmere'],
    rowsTotal: null,
    fit: { number: 1, of: 1, lambda: null, outcome: 'solved', certificate: null },
    loss: 'poisson',
    inverseLink: INVERSE_LINKS.poisson,
    response: { column: 'y', positive: null },
    offset: { kind: 'exposure', column: 'km_years' },
    intercept: -1.5,
    terms,
    coefficients: terms.map(({ name }, j) => ({ name, value: 0.1 / (j + 1) })),
    dropped: [],
  };
}

async function main(): Promise<void> {
  const rows = Number(process.argv[2] ?? 4_000_000);
  const folder = mkdtempSync(join(tmpdir(), 'commonfit-bench-'));
  try {
    const timings: Timing[] = [];
    for (const [from, to] of [
      ['parquet', 'parquet'],
      ['parquet', 'csv'],
      ['csv', 'csv'],
    ] as const) {
      timings.push(await measured(folder, from, to, from === 'csv' ? Math.ceil(rows / 4) : rows));
      const last = timings[timings.length - 1];
      console.log(
        `${from} → ${to}: ${Math.round(last.rowsPerSecond).toLocaleString('en-US')} rows/s, ` +
          `${last.ratioToReading.toFixed(2)} × the time of reading alone, ${last.cpuSecondsPerMillionRows.toFixed(2)} s of processor a million rows, ${last.residentMegabytesMost} MB`,
      );
    }
    writeResults('score', timings, { cores: availableParallelism(), threads: THREADS, p: P, rows });
  } finally {
    rmSync(folder, { recursive: true, force: true });
  }
}

async function measured(folder: string, from: ScoreFormat, to: ScoreFormat, rows: number): Promise<Timing> {
  const table = join(folder, `table.${from}`);
  const engine = await openEngine({ threads: THREADS });
  const names = [...Array.from({ length: P }, (_, j) => `x${j}`), 'km_years'];
  const made = names.map((name, j) => `1.5 + sin(range * ${j + 1}.37 + ${j}) as ${name}`).join(', ');
  await engine.connection.run(
    `copy (select range as pipe, ${made} from range(${rows})) to ${sqlText(table)} (format ${from})`,
  );
  const reader = from === 'parquet' ? 'read_parquet' : 'read_csv';
  const sums = `select ${names.map((name) => `sum(${name})`).join(', ')} from ${reader}(${sqlText(table)})`;
  const scores: number[] = [];
  const reads: number[] = [];
  const cpuSeconds: number[] = [];
  let resident = 0;
  for (let repeat = 0; repeat < REPEATS; repeat++) {
    reads.push(await seconds(async () => void (await engine.connection.run(sums))));
    const out = join(folder, `out.${to}`);
    const before = process.cpuUsage();
    scores.push(
      await seconds(async () => {
        const scored = await scoreTable({
          model: modelOf(),
          table: { path: table, kind: from },
          out: { path: out, format: to },
          columns: ['pipe'],
          flagRows: false,
          threads: THREADS,
          seen: () => {
            resident = Math.max(resident, process.memoryUsage.rss());
          },
          signal: new AbortController().signal,
        });
        if (!scored.ok || scored.value.rows !== rows || statSync(out).size === 0)
          throw new Error(scored.ok ? 'rows are missing' : scored.failure.message);
      }),
    );
    const used = process.cpuUsage(before);
    cpuSeconds.push((used.user + used.system) / 1e6);
  }
  engine.close();
  rmSync(table);
  return {
    from,
    to,
    rowsPerSecond: rows / median(scores),
    readOnlyRowsPerSecond: rows / median(reads),
    ratioToReading: median(scores.map((score, at) => score / reads[at])),
    cpuSecondsPerMillionRows: (median(cpuSeconds) / rows) * 1e6,
    residentMegabytesMost: Math.round(resident / 2 ** 20),
  };
}

async function seconds(work: () => Promise<void>): Promise<number> {
  const began = performance.now();
  await work();
  return (performance.now() - began) / 1000;
}

function median(values: readonly number[]): number {
  const sorted = [...values].sort((a, b) => a - b);
  return sorted[Math.floor(sorted.length / 2)];
}

await main();
