import { execFileSync, spawnSync } from 'node:child_process';
import { availableParallelism } from 'node:os';
import { describe, expect, test } from 'vitest';
import { FIRST_BYTE, JOB_NUMBERS } from '../../numerics/kernels/kernel-memory.js';
import { JOB_KINDS, type Job, jobOf, writeJob } from '../../numerics/kernels/tasks.js';
import { openCrew } from '../../worker/service/crew.js';
import { kernelBytes, kernelVariant } from '../../worker/service/kernel-file.js';
import { must } from '../support/method-driver.js';

const ROOT = new URL('../../', import.meta.url);
const module = new WebAssembly.Module(must(await kernelBytes('simd')));

/** A crew of two with a memory in which this job stands. */
async function crewWith(job: Partial<Job>, silenceMs = 60_000) {
  const crew = must(await openCrew(2, { startMs: 30_000, silenceMs }));
  const memory = new WebAssembly.Memory({ initial: 1, maximum: 1, shared: true });
  writeJob(jobOf(job), new Float64Array(memory.buffer, FIRST_BYTE, JOB_NUMBERS));
  return { crew, post: crew.attach(module, memory) };
}

const pause = (ms: number): void => {
  Atomics.wait(new Int32Array(new SharedArrayBuffer(4)), 0, 0, ms);
};

describe('threads that share the work', () => {
  test('every task is done once, whoever does it, and a crew serves one memory after the other', async () => {
    const { crew } = await crewWith({});
    for (let round = 0; round < 20; round++) {
      const rows = 64;
      const memory = new WebAssembly.Memory({ initial: 1, maximum: 1, shared: true });
      const all = new Float64Array(memory.buffer);
      const [x, theta, out] = [8192, 16_384, 24_576];
      all.fill(1, x / 8, x / 8 + rows);
      all[theta / 8] = round;
      const job = jobOf({ kind: JOB_KINDS.products, rows, stripeRows: 1, p: 1, x, theta, out });
      writeJob(job, new Float64Array(memory.buffer, FIRST_BYTE, JOB_NUMBERS));
      const mine: number[] = [];
      crew.attach(module, memory).run(rows, (task) => {
        mine.push(task);
        pause(round % 2);
      });
      expect(new Set(mine).size).toBe(mine.length);
      const theirs = [...all.subarray(out / 8, out / 8 + rows)].flatMap((v, task) =>
        mine.includes(task) ? [] : [v],
      );
      expect(theirs).toEqual(theirs.map(() => round));
    }
    await crew.close();
  });

  test('what fails in a thread is told by its name, and the thread is not relied on again', async () => {
    const { crew, post } = await crewWith({ kind: 99 });
    expect(() => post.run(8, () => pause(50))).toThrow(
      /^A thread of this worker failed: RangeError: no job is of kind 99/,
    );
    expect(() => post.run(8, () => undefined)).toThrow(/no job is of kind 99/);
    await crew.close();
  });

  test('a thread that is not heard of does not hold the worker for ever', async () => {
    // rows without end, of no column
    const endless = {
      kind: JOB_KINDS.gramStripes,
      rows: 1e300,
      stripeRows: 1e300,
      out: 8192,
      packed: 16_384,
    };
    const { crew, post } = await crewWith(endless, 400);
    expect(() => post.run(2, () => pause(200))).toThrow(
      'A thread of this worker failed: nothing was heard of it for 0.4 s.',
    );
    await crew.close();
  });

  test('the calling thread fails with its own error', async () => {
    const { crew, post } = await crewWith({ kind: JOB_KINDS.products });
    expect(() =>
      post.run(2, () => {
        throw new Error('no such row');
      }),
    ).toThrow('no such row');
    expect(() => post.run(2, () => undefined)).toThrow('A thread of this worker failed');
    await crew.close();
  });

  test('sleeping threads let the process end', () => {
    const program = `const { openCrew } = await import('./dist/worker/service/crew.js');
      const crew = await openCrew(3);
      console.log(crew.ok);`;
    const out = execFileSync(process.execPath, ['--input-type=module', '-e', program], {
      cwd: ROOT,
      encoding: 'utf8',
      timeout: 20_000,
    });
    expect(out).toBe('true\n');
  });

  test('where no threads are to be had, one does the work and the custodian is told', () => {
    const program = `import threads from 'node:worker_threads';
      import { syncBuiltinESMExports } from 'node:module';
      threads.Worker = class { constructor() { throw new Error('no threads here'); } };
      syncBuiltinESMExports();
      const { kernelVariant } = await import('./dist/worker/service/kernel-file.js');
      const told = [];
      const got = await kernelVariant('simd', (message) => told.push(message), 2);
      console.log(JSON.stringify([got.ok && [got.value.name, got.value.threads], told]));`;
    const out = execFileSync(process.execPath, ['--input-type=module', '-e', program], {
      cwd: ROOT,
      encoding: 'utf8',
    });
    expect(JSON.parse(out)).toEqual([
      ['simd', 1],
      ['No 2 threads can be started here: no threads here. One thread does the work.'],
    ]);
  });
});

test('the plain kernel works on one thread, and says so where more were wanted', async () => {
  const told: string[] = [];
  const variant = must(await kernelVariant('plain', (message) => told.push(message), 2));
  expect(variant.threads ?? 1).toBe(1);
  expect(told).toEqual(['The plain kernel works on one thread: --threads 2 changes nothing.']);
});

test.each(['0', '-1', '1.5', 'all', String(availableParallelism() + 1)])(
  '--threads %s is refused',
  (count) => {
    const { status, stderr } = spawnSync(
      process.execPath,
      ['dist/worker/main.js', 'join', 'any.site.yaml', `--threads=${count}`],
      { cwd: ROOT, encoding: 'utf8' },
    );
    expect(status).toBe(2);
    expect(stderr).toContain(`argument '${count}' is invalid`);
    expect(stderr).toMatch(/Say a whole number from 1 to \d+, the cores|have one core: say 1/);
  },
);
