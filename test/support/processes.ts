import { type ChildProcess, spawn } from 'node:child_process';
import { setTimeout as delay } from 'node:timers/promises';

/** How long anything a test waits for may take on a machine that is busy with other tests. Milliseconds. */
const PATIENCE_MS = 30_000;
const LOOK_EVERY_MS = 10;

/** Waits until `look` finds something; after the patience it fails with what `seen` tells. */
export async function until<T>(
  what: string,
  look: () => T | null | undefined | false | Promise<T | null | undefined | false>,
  seen: () => string = () => '',
  patienceMs = PATIENCE_MS,
): Promise<T> {
  const started = performance.now();
  for (;;) {
    const found = await look();
    if (found !== null && found !== undefined && found !== false) return found;
    if (performance.now() - started > patienceMs)
      throw new Error(`${what}: not within ${patienceMs} ms. ${seen()}`);
    await delay(LOOK_EVERY_MS);
  }
}

export interface Ended {
  readonly code: number | null;
  readonly signal: NodeJS.Signals | null;
  readonly stdout: string;
  readonly stderr: string;
}

/** A program of ours in its own process. */
export class Program {
  stdout = '';
  stderr = '';
  readonly #child: ChildProcess;
  readonly #ended: Promise<Ended>;
  #end: Ended | null = null;

  /** `launcher`: a command that starts what follows it, such as one that puts it into a network namespace. */
  constructor(program: string, args: readonly string[], cwd: string, launcher: readonly string[] = []) {
    const [command, ...rest] = [...launcher, process.execPath, program, ...args];
    const child = spawn(command, rest, { cwd, env: { PATH: '' } });
    child.stdout.setEncoding('utf8').on('data', (piece: string) => {
      this.stdout += piece;
    });
    child.stderr.setEncoding('utf8').on('data', (piece: string) => {
      this.stderr += piece;
    });
    this.#child = child;
    this.#ended = new Promise((resolve, reject) => {
      child.once('error', reject);
      child.once('close', (code, signal) => {
        this.#end = { code, signal, stdout: this.stdout, stderr: this.stderr };
        resolve(this.#end);
      });
    });
  }

  get pid(): number {
    if (this.#child.pid === undefined) throw new Error('the program did not start');
    return this.#child.pid;
  }

  get running(): boolean {
    return this.#end === null;
  }

  /** Sends a signal to this process alone. */
  signal(name: NodeJS.Signals): void {
    if (this.running) this.#child.kill(name);
  }

  /** SIGKILL, and gone. Does nothing to a program that has ended. */
  async kill(): Promise<void> {
    this.signal('SIGKILL');
    await this.#ended;
  }

  /** Waits for its end by itself. */
  end(patienceMs?: number): Promise<Ended> {
    return until('the end of a program', () => this.#end, this.#seen, patienceMs);
  }

  /** Waits for text on either stream. */
  async says(text: string | RegExp): Promise<string> {
    const found = await until(
      `a program saying ${text}`,
      () => {
        const all = this.stdout + this.stderr;
        if (typeof text === 'string' ? all.includes(text) : text.test(all)) return all;
        if (!this.running) throw new Error(`It ended before it said ${text}. ${this.#seen()}`);
        return null;
      },
      this.#seen,
    );
    return found;
  }

  /** The JSON lines so far, on standard output unless said otherwise. */
  jsonLines<T>(from: 'stdout' | 'stderr' = 'stdout'): T[] {
    const text = this[from];
    const whole = text.slice(0, text.lastIndexOf('\n') + 1);
    return whole
      .split('\n')
      .filter((line) => line !== '')
      .map((line) => JSON.parse(line) as T);
  }

  /** The end of what it said on either stream. */
  get lastWords(): string {
    return `${this.stdout}${this.stderr}`.slice(-3000);
  }

  readonly #seen = (): string =>
    `Exit ${JSON.stringify(this.#end?.code ?? null)}; it said: ${this.lastWords}`;
}
