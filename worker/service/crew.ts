import { once } from 'node:events';
import { setTimeout as delay } from 'node:timers/promises';
import { MessageChannel, type MessagePort, receiveMessageOnPort, Worker } from 'node:worker_threads';
import type { Crew, CrewPost } from '../../numerics/kernels/crew.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import {
  awaitChange,
  type MemberStart,
  type Posted,
  READY,
  type Reported,
  takeTicket,
  WORD_COUNT,
  WORDS,
} from './crew-control.js';

/** The compiled program of a thread; sources (under test) use the one that the last build made. */
const PROGRAM = new URL(
  import.meta.url.endsWith('.ts') ? '../../dist/worker/service/crew-thread.js' : './crew-thread.js',
  import.meta.url,
);

/** How long threads may take to start, and one to be heard of again: its longest task takes a second. */
export const CREW_TIMES = { startMs: 30_000, silenceMs: 60_000 } as const;
/** A process that was stopped and goes on finds its clock far ahead: silence is counted in pieces. */
const PIECES = 20;

interface Member {
  readonly thread: Worker;
  readonly port: MessagePort;
}

/**
 * So many threads, the calling one among them, that sleep while there is nothing to do and end with the process. Fails with
 * `not-supported` where they cannot be had.
 */
export async function openCrew(
  size: number,
  times: { readonly startMs: number; readonly silenceMs: number } = CREW_TIMES,
): Promise<Checked<ThreadCrew>> {
  const words = new Int32Array(new SharedArrayBuffer(4 * WORD_COUNT));
  const members: Member[] = [];
  try {
    for (let member = 1; member < size; member++) members.push(started(words, member));
    await Promise.all(members.map(({ thread }) => ready(thread, times.startMs)));
  } catch (error) {
    await Promise.all(members.map(({ thread }) => thread.terminate()));
    const reason = error instanceof Error ? error.message : String(error);
    return fail('not-supported', `No ${size} threads can be started here: ${reason}.`, {
      remedy: 'Say --threads 1, or give the process more memory.',
    });
  }
  return succeed(new ThreadCrew(words, members, times.silenceMs));
}

function started(words: Int32Array, member: number): Member {
  const { port1, port2 } = new MessageChannel();
  const workerData: MemberStart = { words, member, port: port2 };
  return { thread: new Worker(PROGRAM, { workerData, transferList: [port2], execArgv: [] }), port: port1 };
}

/** Resolves once the thread says so; it does not keep the process running from then on. */
async function ready(thread: Worker, startMs: number): Promise<void> {
  const late = new AbortController();
  try {
    const said = await Promise.race([
      once(thread, 'message', { signal: late.signal }).then(([message]) => message as unknown),
      once(thread, 'exit', { signal: late.signal }).then(() => 'a thread ended at once'),
      delay(startMs, `a thread was not ready within ${startMs / 1000} s`, { signal: late.signal }),
    ]);
    if (said !== READY) throw new Error(String(said));
    thread.unref();
  } finally {
    late.abort();
  }
}

/** See `openCrew`. */
export class ThreadCrew implements Crew {
  readonly size: number;
  #ids = 0;
  /** Why there is no relying on the threads any more. */
  #broken: string | null = null;
  /** Threads keep a memory alive as long as they know it: they let go when nobody here does. */
  readonly #left = new FinalizationRegistry<number>((id) => this.#forget(id));

  constructor(
    private readonly words: Int32Array,
    private readonly members: readonly Member[],
    private readonly silenceMs: number,
  ) {
    this.size = members.length + 1;
    for (const { thread } of members) {
      thread.once('error', (error) => this.#break(error.message));
      thread.once('exit', () => this.#break('it ended'));
    }
  }

  attach(module: WebAssembly.Module, memory: WebAssembly.Memory): CrewPost {
    this.#ids += 1;
    const posted: Posted = { id: this.#ids, program: { module, memory } };
    const post: CrewPost = { run: (count, own) => this.#run(posted, count, own) };
    this.#left.register(memory, posted.id);
    return post;
  }

  /** Ends the threads; a process that ends does so by itself. */
  async close(): Promise<void> {
    this.#break('the crew was closed');
    await Promise.all(this.members.map(({ thread }) => thread.terminate()));
  }

  #run(posted: Posted, count: number, own: (task: number) => void): void {
    const { words } = this;
    if (this.#broken !== null) throw new Error(`A thread of this worker failed: ${this.#broken}.`);
    if (Atomics.load(words, WORDS.memory) !== posted.id) {
      this.#post(posted);
      Atomics.store(words, WORDS.memory, posted.id);
    }
    Atomics.store(words, WORDS.tasksDone, 0);
    Atomics.store(words, WORDS.tickets, count);
    this.#call();
    this.#takePart(own);
    this.#awaitOthers(count);
    if (Atomics.load(words, WORDS.failed) !== 0) throw this.#failure();
  }

  #takePart(own: (task: number) => void): void {
    const { words } = this;
    try {
      for (let task = takeTicket(words); task !== null; task = takeTicket(words)) {
        own(task);
        Atomics.add(words, WORDS.tasksDone, 1);
      }
    } catch (error) {
      // the others are not done with a memory that the next job would use
      this.#break('the calling thread failed in a task');
      throw error;
    }
  }

  /** Tasks that others took are under way: a short wait, and a bounded one. */
  #awaitOthers(count: number): void {
    const { words } = this;
    for (let silent = 0; ; ) {
      const tasksDone = Atomics.load(words, WORDS.tasksDone);
      if (tasksDone === count) return;
      silent = awaitChange(words, WORDS.tasksDone, tasksDone, this.silenceMs / PIECES) ? 0 : silent + 1;
      if (silent < PIECES) continue;
      this.#break(`nothing was heard of it for ${this.silenceMs / 1000} s`);
      throw new Error(`A thread of this worker failed: ${this.#broken}.`);
    }
  }

  #failure(): Error {
    const reports = this.members.flatMap(({ port }) => {
      const got = receiveMessageOnPort(port);
      return got === undefined ? [] : [(got.message as Reported).failure];
    });
    this.#break(reports.join('; ') || 'it did not say why');
    return new Error(`A thread of this worker failed: ${this.#broken}.`);
  }

  #break(reason: string): void {
    this.#broken ??= reason;
  }

  #post(posted: Posted): void {
    for (const { port } of this.members) port.postMessage(posted);
  }

  #call(): void {
    Atomics.add(this.words, WORDS.calls, 1);
    Atomics.notify(this.words, WORDS.calls);
  }

  #forget(id: number): void {
    if (Atomics.load(this.words, WORDS.memory) !== id) return;
    Atomics.store(this.words, WORDS.memory, 0);
    this.#post({ id: 0, program: null });
    this.#call();
  }
}
