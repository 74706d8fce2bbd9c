import { spawn, spawnSync } from 'node:child_process';
import { createServer } from 'node:net';
import { fileURLToPath } from 'node:url';
import { getContainerRuntimeClient } from 'testcontainers';
import { until } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { Following, type Stage } from '../support/stage.js';

type Engine = Awaited<ReturnType<typeof getContainerRuntimeClient>>['container']['dockerode'];

const ROOT = fileURLToPath(new URL('../../', import.meta.url));
const PROJECT = 'commonfit-test';
export const BASE_IMAGE = process.env.COMMONFIT_BASE_IMAGE ?? 'commonfit-base:local';
/** From nothing to three images, on a machine that does other things too. Milliseconds. */
const BUILD_MOST_MS = 600_000;
/** Any other command of the engine or of Compose. Milliseconds. */
const COMMAND_MOST_MS = 120_000;

const succeeds = (...args: readonly string[]): boolean =>
  spawnSync('docker', args, { stdio: 'ignore', timeout: 20_000 }).status === 0;

/** Why the container tests cannot run here; null where they can. */
export function withoutEngine(): string | null {
  if (!succeeds('version')) return 'skipped: no container engine answers here';
  if (succeeds('image', 'inspect', BASE_IMAGE)) return null;
  return `skipped: there is no base image ${BASE_IMAGE}; test/containers/engine.sh makes one`;
}

/** Standard output of a command that must succeed in time. */
function outputOf(
  command: string,
  args: readonly string[],
  mostMs = COMMAND_MOST_MS,
  env: Readonly<Record<string, string>> = {},
): Promise<string> {
  return new Promise((resolve, reject) => {
    const options = { cwd: ROOT, env: { ...process.env, ...env }, timeout: mostMs };
    const child = spawn(command, args, { ...options, stdio: ['ignore', 'pipe', 'pipe'] });
    let [stdout, said] = ['', ''];
    child.stdout.setEncoding('utf8').on('data', (text: string) => {
      stdout += text;
      said += text;
    });
    child.stderr.setEncoding('utf8').on('data', (text: string) => {
      said += text;
    });
    child.once('error', reject).once('close', (code, signal) => {
      if (code === 0) resolve(stdout);
      else reject(new Error(`${command} ${args.join(' ')}: ${code ?? signal}\n${said.slice(-4000)}`));
    });
  });
}

export const docker = (...args: readonly string[]): Promise<string> => outputOf('docker', args);

/** Compose as a plugin, or the older program: whichever there is. */
function compose(
  args: readonly string[],
  env: Readonly<Record<string, string>>,
  mostMs?: number,
): Promise<string> {
  const [command, ...first] = succeeds('compose', 'version') ? ['docker', 'compose'] : ['docker-compose'];
  const settings = {
    COMPOSE_PROJECT_NAME: PROJECT,
    COMPOSE_PROFILES: 'services',
    COMMONFIT_BASE_IMAGE: BASE_IMAGE,
    COMMONFIT_BUILD_NETWORK: process.env.COMMONFIT_BUILD_NETWORK ?? 'host',
  };
  return outputOf(command, [...first, ...args], mostMs, { ...settings, ...env });
}

/** Builds each image once: four services share the worker's. */
export const buildImages = (): Promise<string> =>
  compose(['build', 'coordinator', 'harrowmere', 'setup'], {}, BUILD_MOST_MS);

const composeLabels = (service: string): string[] => [
  `com.docker.compose.project=${PROJECT}`,
  `com.docker.compose.service=${service}`,
];

const stackLabels = (service: string): string[] => [`com.docker.swarm.service.name=${PROJECT}_${service}`];

/** Whether this engine has not joined a swarm: a test must not leave somebody's. */
export const outsideSwarm = async (): Promise<boolean> =>
  (await docker('info', '--format', '{{.Swarm.LocalNodeState}}')).trim() === 'inactive';

/** The services of docker-compose.yml, as a user starts them, and what an analyst on this machine needs. */
export class Services {
  private constructor(
    private readonly engine: Engine,
    private readonly stage: Stage,
    readonly port: number,
    private readonly labelsOf: (service: string) => string[],
  ) {}

  /** Starts the profile `services`; the analyst's token and authority go into the stage's folder. */
  static async start(stage: Stage): Promise<Services> {
    const { container } = await getContainerRuntimeClient();
    const services = new Services(container.dockerode, stage, await freePort(), composeLabels);
    try {
      await services.compose('up', '-d', '--no-build');
      const admit = ['commonfit', 'admit', '--analyst', 'tester', '--state', '/state'];
      await stage.write('tester.token', await services.run('coordinator', admit));
      await stage.write('ca.pem', await services.run('coordinator', ['cat', '/run/secrets/ca.pem']));
    } catch (error) {
      await services.stop();
      throw error;
    }
    return services;
  }

  private compose(...args: readonly string[]): Promise<string> {
    return compose(args, { COMMONFIT_PORT: String(this.port) });
  }

  /** Ends these and starts docker-compose.yml as a stack on a swarm of one node, on the same volumes. */
  async toStack(): Promise<Services> {
    await this.compose('down', '--timeout', '20');
    await docker('swarm', 'init', '--advertise-addr', '127.0.0.1');
    const env = { COMMONFIT_PORT: String(this.port) };
    await outputOf('docker', ['stack', 'deploy', '-c', 'docker-compose.yml', PROJECT], COMMAND_MOST_MS, env);
    return new Services(this.engine, this.stage, this.port, stackLabels);
  }

  /** Removes the stack, and leaves the swarm that it was deployed on; volumes stay. */
  static async leaveSwarm(): Promise<void> {
    await docker('stack', 'rm', PROJECT).catch(() => '');
    const left = ['ps', '-aq', '--filter', `label=com.docker.stack.namespace=${PROJECT}`];
    await until('the end of the stack', async () => (await docker(...left)) === '', undefined, 60_000);
    await docker('swarm', 'leave', '--force').catch(() => '');
  }

  /** Ends and removes everything, volumes too. */
  async stop(): Promise<void> {
    await this.compose('down', '--volumes', '--timeout', '20');
  }

  /** Until the engine's health check of a service says so. */
  healthy(service: string): Promise<unknown> {
    return until(
      `${service} being healthy`,
      async () => {
        const found = await this.find(service);
        return found !== null && (await found.inspect()).State.Health?.Status === 'healthy';
      },
      () => '',
      60_000,
    );
  }

  /** Standard output of a command in the container of a service, which must succeed. */
  async run(service: string, command: readonly string[]): Promise<string> {
    return docker('exec', await this.idOf(service), ...command);
  }

  /** What `docker logs` shows of a service, both streams. */
  async logOf(service: string): Promise<string> {
    const seen = await (await this.handle(service)).logs({ stdout: true, stderr: true });
    return seen.toString('utf8');
  }

  async handle(service: string) {
    return this.engine.getContainer(await this.idOf(service));
  }

  /** The network of a worker, which is the only one it has. */
  async networkOf(service: string) {
    const { NetworkSettings } = await (await this.handle(service)).inspect();
    const names = Object.keys(NetworkSettings.Networks);
    if (names.length !== 1) throw new Error(`${service} is on the networks ${names.join(', ')}`);
    return this.engine.getNetwork(names[0]);
  }

  /** Bytes of an image, its base included. */
  async sizeOf(image: string): Promise<number> {
    return (await this.engine.getImage(image).inspect()).Size;
  }

  /** Submits a specification of the stage's folder from this machine, and follows it. */
  submit(file: string): Following {
    const args = ['submit', file, '--watch', '--json', '--url', `https://localhost:${this.port}`];
    const who = ['--token-file', 'tester.token', '--ca-file', 'ca.pem'];
    return new Following(this.stage, this.stage.start(programs.commonfit, ...args, ...who));
  }

  /** The bytes of result.json of a run that has ended. */
  async resultOf(following: Following): Promise<string> {
    await following.program.end(240_000);
    return this.run('coordinator', ['cat', `/state/runs/${await following.run()}/result.json`]);
  }

  private async idOf(service: string): Promise<string> {
    const found = await this.find(service);
    if (found === null) throw new Error(`there is no container of ${service}`);
    return found.id;
  }

  private async find(service: string) {
    // the newest, where a service has been started again in a new container
    const filters = { label: this.labelsOf(service) };
    const [found] = await this.engine.listContainers({ all: true, filters });
    return found === undefined ? null : this.engine.getContainer(found.Id);
  }
}

export function freePort(): Promise<number> {
  return new Promise((resolve, reject) => {
    const server = createServer().once('error', reject);
    server.listen(0, '127.0.0.1', () => {
      const address = server.address();
      server.close(() =>
        typeof address === 'object' && address !== null
          ? resolve(address.port)
          : reject(new Error('no port')),
      );
    });
  });
}
