import { existsSync, readFileSync } from 'node:fs';
import { open } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, expect, test } from 'vitest';
import { until } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { siteFileOf } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

let stage: Stage;

beforeAll(async () => {
  stage = await Stage.open('large-table');
  stage.address = 'http://127.0.0.1:1';
  await stage.write('castlefen.site.yaml', siteFileOf(stage, 'castlefen', '{csv: ./pipes.csv}'));
});
afterAll(() => stage?.close());

const SPECIFICATION = `commonfit: 1
title: Mean breaks
sites: [castlefen]
response: {column: breaks}
loss: squared
terms: []
`;

const FILE_BYTES = 400e6;
/** Less than the file: a worker that held it would be above. */
const RESIDENT_BYTES_MOST = 350e6;

test.skipIf(!existsSync('/proc/self/status'))(
  'a CSV file of 400 MB is read in memory that does not hold it (peak resident memory, from /proc)',
  PATIENT,
  async () => {
    await writeWide(join(stage.folder, 'pipes.csv'), FILE_BYTES);
    await stage.write('wide.fit.yaml', SPECIFICATION);
    const inspecting = stage.start(
      programs.worker,
      'inspect',
      'castlefen.site.yaml',
      'wide.fit.yaml',
      '--json',
    );
    let peak = 0;
    await until('the end of the inspection', () => {
      peak = Math.max(peak, peakResident(inspecting.pid));
      return !inspecting.running;
    });
    const { code, stdout } = await inspecting.end();
    expect(code).toBe(0);
    expect(JSON.parse(stdout).rows.used).toBeGreaterThan(1e6);
    expect(peak).toBeGreaterThan(0);
    expect(peak).toBeLessThan(RESIDENT_BYTES_MOST);
  },
);

/** Peak resident memory of a process so far, bytes; 0 once it is gone. */
function peakResident(pid: number): number {
  try {
    return 1024 * Number(/VmHWM:\s+(\d+) kB/.exec(readFileSync(`/proc/${pid}/status`, 'utf8'))?.[1] ?? 0);
  } catch {
    return 0;
  }
}

/** A CSV file of at least `bytes` bytes with one column that is used and thirty that are not. */
async function writeWide(path: string, bytes: number): Promise<void> {
  const others = Array.from({ length: 30 }, (_, j) => `remark_${j}`);
  let lines = '';
  for (let i = 0; lines.length < 4e6; i++)
    lines += `${i % 7},${others.map((_, j) => `remark-${(31 * i + j) % 1000}`).join(',')}\n`;
  const block = Buffer.from(lines);
  const file = await open(path, 'w');
  try {
    await file.write(`breaks,${others.join(',')}\n`);
    for (let written = 0; written < bytes; written += block.length) await file.write(block);
  } finally {
    await file.close();
  }
}
