import type { MessagePort } from 'node:worker_threads';

/**
 * Words that the threads of a crew share. Tickets are handed out downwards from the number of tasks: a thread that comes
 * late finds none left, whatever job is on by then.
 */
export const WORDS = {
  /** Counts what there was to wake up for. */
  calls: 0,
  tickets: 1,
  tasksDone: 2,
  /** Which of the memories posted the tasks belong to. */
  memory: 3,
  failed: 4,
} as const;
export const WORD_COUNT = 5;

/** How often a thread looks again before it lies down: waking it up takes longer than most pauses between tasks. */
const LOOKS = 4000;

/** Waits until the word is no longer `value`, at most `waitMs`; false where it still is. */
export function awaitChange(words: Int32Array, at: number, value: number, waitMs: number): boolean {
  for (let look = 0; look < LOOKS; look++) if (Atomics.load(words, at) !== value) return true;
  return Atomics.wait(words, at, value, waitMs) !== 'timed-out';
}

/** Takes a ticket: the number of a task, or null where none is left. */
export function takeTicket(words: Int32Array): number | null {
  if (Atomics.load(words, WORDS.tickets) <= 0) return null;
  const left = Atomics.sub(words, WORDS.tickets, 1);
  return left <= 0 ? null : left - 1;
}

/** What a thread is started with. */
export interface MemberStart {
  readonly words: Int32Array;
  /** 1, 2, …; the calling thread is 0. */
  readonly member: number;
  /** Over which memories are posted, and failures reported: both are read without going back to the event loop. */
  readonly port: MessagePort;
}

/** What is posted to the threads before the first task on a memory; null to let go of the last one. */
export interface Posted {
  readonly id: number;
  readonly program: { readonly module: WebAssembly.Module; readonly memory: WebAssembly.Memory } | null;
}

/** What a thread posts when a task failed. */
export interface Reported {
  readonly failure: string;
}

/** Posted once a thread has its program and waits to be called. */
export const READY = 'ready';
