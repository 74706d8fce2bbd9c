import { execFileSync } from 'node:child_process';
import { existsSync } from 'node:fs';
import { delimiter, join } from 'node:path';

/** Smallest packet that every path must carry (RFC 791): many packets, so that some are lost. Bytes. */
const MTU = 576;

/**
 * A network namespace of Linux whose loopback loses packets at random, for real TCP over real loss. Needs root, `ip` and
 * `tc`; the loss is a classic BPF program on the way out, which needs no queueing module beside the common ones.
 */
export class LossyNamespace {
  private constructor(
    private readonly name: string,
    /** Starts a command in the namespace. */
    readonly launcher: readonly string[],
  ) {}

  /** A namespace that loses this share of packets, or why there can be none here. */
  static open(lossShare: number): LossyNamespace | string {
    if (process.platform !== 'linux' || process.getuid?.() !== 0)
      return 'network namespaces need Linux and root';
    const ip = onPath('ip');
    if (ip === null || onPath('tc') === null) return 'ip or tc is not installed';
    const name = `commonfit-${process.pid}`;
    const namespace = new LossyNamespace(name, [ip, 'netns', 'exec', name]);
    try {
      run(ip, 'netns', 'add', name);
    } catch (error) {
      return `no network namespace may be made here: ${String(error)}`;
    }
    try {
      namespace.run('ip', 'link', 'set', 'lo', 'mtu', String(MTU), 'up');
      namespace.run('tc', 'qdisc', 'add', 'dev', 'lo', 'clsact');
      namespace.run(
        ...['tc', 'filter', 'add', 'dev', 'lo', 'egress', 'bpf', 'direct-action'],
        ...['bytecode', lossProgram(lossShare)],
      );
      return namespace;
    } catch (error) {
      namespace.close();
      return `the kernel cannot lose packets: ${String(error)}`;
    }
  }

  /** TCP segments sent again in the namespace so far (`RetransSegs`, RFC 4022). */
  retransmitted(): number {
    const lines = this.run('cat', '/proc/net/snmp').split('\n');
    const [names, values] = lines.filter((line) => line.startsWith('Tcp:')).map((line) => line.split(' '));
    return Number(values[names.indexOf('RetransSegs')]);
  }

  /** To be called once no process is in it. */
  close(): void {
    run(this.launcher[0], 'netns', 'delete', this.name);
  }

  private run(...command: string[]): string {
    const [first, ...rest] = [...this.launcher, ...command];
    return run(first, ...rest);
  }
}

const run = (command: string, ...args: string[]): string =>
  execFileSync(command, args, { encoding: 'utf8', stdio: ['ignore', 'pipe', 'pipe'] });

function onPath(command: string): string | null {
  const folders = (process.env.PATH ?? '').split(delimiter);
  return folders.map((folder) => join(folder, command)).find((file) => existsSync(file)) ?? null;
}

/** Classic BPF for tc: loads a random word (ancillary data 56), passes (0) up to the threshold's complement, else drops (2). */
function lossProgram(lossShare: number): string {
  const randomWord = 2 ** 32 - 0x1000 + 56;
  const threshold = Math.floor(lossShare * 2 ** 32);
  return `4,32 0 0 ${randomWord},37 0 1 ${threshold},6 0 0 0,6 0 0 2`;
}
