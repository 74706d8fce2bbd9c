/** Threads that share the work on one kernel's memory. How they are made, woken and waited for is not known here. */
export interface Crew {
  /** Threads, the calling one among them. */
  readonly size: number;
  /** Gives every thread the program and the memory of a kernel. */
  attach(module: WebAssembly.Module, memory: WebAssembly.Memory): CrewPost;
}

export interface CrewPost {
  /**
   * Has tasks 0 … count − 1 done, each once, by whichever thread comes first, and returns when all are: the calling thread
   * by `own`, the others by `runTask` (tasks.ts) with what the memory says. Throws an Error where another thread failed or
   * is not heard of.
   */
  run(count: number, own: (task: number) => void): void;
}
