import { type ChildProcess, spawn } from 'node:child_process';
import { createWriteStream } from 'node:fs';
import { readFile } from 'node:fs/promises';
import { fileURLToPath } from 'node:url';

/** The custodian's program as built beside this one. */
const WORKER_PROGRAM = fileURLToPath(new URL('../../worker/main.js', import.meta.url));
/** How long a worker may take to stop by itself before it is killed. Milliseconds. */
const STOP_GRACE_MS = 5_000;
const TAIL_LINES = 6;

export interface WorkerProcess {
  readonly site: string;
  readonly logFile: string;
  /** Stops it, by force after a grace time; resolves when it is gone. */
  stop(): Promise<void>;
}

/** Starts one worker on a site file; `ended` is called if it ends before it is told to. */
export function startWorker(
  site: string,
  siteFile: string,
  logFile: string,
  ended: (site: string, how: string) => void,
): WorkerProcess {
  const child = spawn(process.execPath, [WORKER_PROGRAM, 'join', siteFile], {
    stdio: ['ignore', 'pipe', 'pipe'],
  });
  const log = createWriteStream(logFile, { mode: 0o600 });
  child.stdout.pipe(log, { end: false });
  child.stderr.pipe(log, { end: false });
  // On a full disk the worker goes on unlogged; what stops the run there is the journal.
  log.on('error', () => {
    child.stdout.resume();
    child.stderr.resume();
  });
  let stopping = false;
  const gone = new Promise<void>((resolve) => {
    const settle = (how: string): void => {
      log.end(resolve);
      if (!stopping) ended(site, how);
    };
    child.once('error', (error) => settle(error.message));
    child.once('close', (code, signal) => settle(signal === null ? `exit code ${code}` : `signal ${signal}`));
  });
  return {
    site,
    logFile,
    stop: async () => {
      stopping = true;
      await stopChild(child, gone);
    },
  };
}

async function stopChild(child: ChildProcess, gone: Promise<void>): Promise<void> {
  if (child.exitCode === null && child.signalCode === null) child.kill('SIGTERM');
  const force = setTimeout(() => child.kill('SIGKILL'), STOP_GRACE_MS);
  await gone;
  clearTimeout(force);
}

/** The last lines a worker wrote, for a message about how it ended. */
export async function tailOf(file: string): Promise<string[]> {
  const text = await readFile(file, 'utf8').catch(() => '');
  return text.trimEnd().split('\n').slice(-TAIL_LINES);
}

/** Runs a program of ours to its end, or until `signal` ends it; what it wrote and its exit code. */
export async function runProgram(
  program: string,
  args: readonly string[],
  signal: AbortSignal,
): Promise<{ code: number; stdout: string; stderr: string }> {
  const child = spawn(process.execPath, [program, ...args], { stdio: ['ignore', 'pipe', 'pipe'] });
  const stop = (): void => void child.kill('SIGTERM');
  signal.addEventListener('abort', stop, { once: true });
  const texts = { stdout: '', stderr: '' };
  child.stdout.setEncoding('utf8').on('data', (piece: string) => {
    texts.stdout += piece;
  });
  child.stderr.setEncoding('utf8').on('data', (piece: string) => {
    texts.stderr += piece;
  });
  try {
    const code = await new Promise<number>((resolve, reject) => {
      child.once('error', reject);
      child.once('close', (exit) => resolve(exit ?? 1));
    });
    return { code, ...texts };
  } finally {
    signal.removeEventListener('abort', stop);
  }
}

/** Runs a command of the custodian's program to its end. */
export const runWorkerCommand = (
  args: readonly string[],
  signal: AbortSignal,
): Promise<{ code: number; stdout: string; stderr: string }> => runProgram(WORKER_PROGRAM, args, signal);
