import { parentPort, receiveMessageOnPort, workerData } from 'node:worker_threads';
import { FIRST_BYTE, JOB_NUMBERS } from '../../numerics/kernels/kernel-memory.js';
import { readJob, runTask } from '../../numerics/kernels/tasks.js';
import { instantiate, type KernelExports } from '../../numerics/kernels/variants.js';
import {
  awaitChange,
  type MemberStart,
  type Posted,
  READY,
  type Reported,
  takeTicket,
  WORDS,
} from './crew-control.js';

/** A thread of a crew (crew.ts): waits to be called, does tasks while tickets are left, and lives as long as the process. */
interface Program {
  readonly id: number;
  readonly code: KernelExports;
  readonly job: Float64Array;
}

const { words, member, port } = workerData as MemberStart;
let program: Program | null = null;

/** The newest of what was posted. */
function receive(): void {
  for (let got = receiveMessageOnPort(port); got !== undefined; got = receiveMessageOnPort(port)) {
    const { id, program: given } = got.message as Posted;
    program = null;
    if (given === null) continue;
    const job = new Float64Array(given.memory.buffer, FIRST_BYTE, JOB_NUMBERS);
    program = { id, code: instantiate(given.module, given.memory), job };
  }
}

function doTask(task: number): void {
  if (program?.id !== Atomics.load(words, WORDS.memory)) receive();
  if (program === null) throw new Error('a task came without a memory');
  runTask(program.code, readJob(program.job), task, member);
}

parentPort?.postMessage(READY);
for (let calls = 0; ; ) {
  awaitChange(words, WORDS.calls, calls, Number.POSITIVE_INFINITY);
  calls = Atomics.load(words, WORDS.calls);
  receive();
  for (let task = takeTicket(words); task !== null; task = takeTicket(words)) {
    try {
      doTask(task);
    } catch (error) {
      const failure = error instanceof Error ? (error.stack ?? error.message) : String(error);
      port.postMessage({ failure } satisfies Reported);
      Atomics.store(words, WORDS.failed, 1);
    }
    Atomics.add(words, WORDS.tasksDone, 1);
    Atomics.notify(words, WORDS.tasksDone);
  }
}
