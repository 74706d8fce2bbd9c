/** A Parquet table whose design is four times the limit of --memory, fitted within the limit and 400 MB. Minutes: COMMONFIT_LONG=1. */
import { existsSync, readFileSync } from 'node:fs';
import { join } from 'node:path';
import { afterAll, beforeAll, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { openEngine, sqlText } from '../../worker/source/duckdb.js';
import type { Program } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { siteFileOf } from '../support/small-scenario.js';
import { Stage } from '../support/stage.js';

const long = process.env.COMMONFIT_LONG === '1' && existsSync('/proc/self/status');
const PATIENT = { timeout: 1_200_000 } as const;
const SITE = 'harrowmere';
const LIMIT = { text: '128MB', bytes: 128e6 } as const;
const COLUMNS = Array.from({ length: 100 }, (_, j) => `reading_${j + 1}`);
const ROWS = (4 * LIMIT.bytes) / (8 * COLUMNS.length);
const BESIDE_BYTES = 400e6;

const FIT = `commonfit: 1
title: Failures by reading
sites: [${SITE}]
response: {column: failed, positive: yes}
loss: logistic
terms: [${COLUMNS.map((column) => `{column: ${column}}`).join(', ')}]
penalty:
  - {kind: elastic-net, lambda: 0.001, l1: 0.5}
`;

let stage: Stage;
beforeAll(async () => {
  if (!long) return;
  stage = await Stage.open('four-times-memory');
  await stage.serve();
  await writeTable(join(stage.folder, 'pipes.parquet'));
  await stage.write(`${SITE}.site.yaml`, siteFileOf(stage, SITE, '{parquet: ./pipes.parquet}'));
  await stage.write('failures.fit.yaml', FIT);
  await stage.admit(SITE);
}, PATIENT.timeout);
afterAll(() => stage?.close());

async function writeTable(path: string): Promise<void> {
  const engine = await openEngine({ threads: 1 });
  const readings = COLUMNS.map((name, j) => `random() + ${j % 7} as ${name}`).join(', ');
  const [first, second] = COLUMNS;
  const risk = `1 / (1 + exp(${second} - ${first} - 0.5))`;
  try {
    await engine.connection.run('select setseed(0.5)');
    await engine.connection.run(
      `copy (select *, case when random() < ${risk} then 'yes' else 'no' end as failed ` +
        `from (select ${readings} from range(${ROWS}))) to ${sqlText(path)} (format parquet, row_group_size 100000)`,
    );
  } finally {
    engine.close();
  }
}

async function fitted(
  ...more: readonly string[]
): Promise<{ result: ResultDocument; peak: number; worker: Program }> {
  const worker = stage.start(programs.worker, 'join', `${SITE}.site.yaml`, '--json', ...more);
  await worker.says('Connected to');
  const { code, result } = await stage.submit('failures.fit.yaml').outcome(PATIENT.timeout);
  expect(code).toBe(0);
  const status = readFileSync(`/proc/${worker.pid}/status`, 'utf8');
  const peak = 1024 * Number(/VmHWM:\s+(\d+) kB/.exec(status)?.[1]);
  await worker.kill();
  return { result: JSON.parse(result) as ResultDocument, peak, worker };
}

test.skipIf(!long)('a design four times --memory', PATIENT, async () => {
  const streamed = await fitted('--memory', LIMIT.text);
  const inMemory = await fitted();
  console.info(
    `Resident at most: ${Math.round(streamed.peak / 1e6)} MB with --memory ${LIMIT.text}, ${Math.round(inMemory.peak / 1e6)} MB without.`,
  );
  expect(streamed.worker.stderr).toContain(`"bytesOnDisk":${4 * LIMIT.bytes}`);
  expect(streamed.peak).toBeLessThan(LIMIT.bytes + BESIDE_BYTES);
  expect(inMemory.peak).toBeGreaterThan(4 * LIMIT.bytes);
  const [found, wanted] = [streamed, inMemory].map(({ result }) => result.fits[0]);
  expect(found.certificate?.kind).toBe(wanted.certificate?.kind);
  for (const [name, value] of Object.entries(wanted.coefficients))
    expect(Math.abs(found.coefficients[name] - value), name).toBeLessThanOrEqual(1e-10);
});
