import { type ChildProcess, spawn, spawnSync } from 'node:child_process';
import { mkdtemp, rm } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { until } from './processes.js';

/** Whether this user may mount a file system in a name space of its own; tests that need one are skipped elsewhere. */
export const mayMount =
  process.platform === 'linux' &&
  spawnSync('unshare', ['-rm', 'mount', '-t', 'tmpfs', 'none', tmpdir()]).status === 0;

/**
 * A small file system in memory, seen by a process that holds it and, through `/proc`, by whoever is given its path. It
 * goes with `close`, or with this process.
 */
export class Volume {
  #said = '';

  private constructor(
    private readonly holder: ChildProcess,
    private readonly mountPoint: string,
  ) {
    holder.stdout?.on('data', (piece: Buffer) => {
      this.#said += piece.toString();
    });
  }

  /** `size` as mount takes it: `256k`. */
  static async open(size: string): Promise<Volume> {
    const mountPoint = await mkdtemp(join(tmpdir(), 'commonfit-volume-'));
    const script = 'while read -r line; do eval "$line" && echo done; done';
    const holder = spawn('unshare', ['-rm', 'sh', '-c', script], { stdio: ['pipe', 'pipe', 'inherit'] });
    const volume = new Volume(holder, mountPoint);
    await volume.run(`mount -t tmpfs -o size=${size} none ${mountPoint}`);
    return volume;
  }

  /** Valid in every process of this user. */
  get path(): string {
    return `/proc/${this.holder.pid}/root${this.mountPoint}`;
  }

  /** Takes all space but `kib` KiB. */
  async fill(kib = 0): Promise<void> {
    await this.run(
      `dd if=/dev/zero of=${this.mountPoint}/filler bs=1k 2>/dev/null; truncate -s -${kib}k ${this.mountPoint}/filler`,
    );
  }

  free(): Promise<void> {
    return this.run(`rm ${this.mountPoint}/filler`);
  }

  readOnly(): Promise<void> {
    return this.run(`mount -o remount,ro ${this.mountPoint}`);
  }

  async close(): Promise<void> {
    const gone = new Promise((resolve) => this.holder.once('close', resolve));
    this.holder.stdin?.end();
    await gone;
    await rm(this.mountPoint, { recursive: true });
  }

  private async run(line: string): Promise<void> {
    this.#said = '';
    this.holder.stdin?.write(`${line}\n`);
    await until(line, () => this.#said.includes('done'));
  }
}
