import { spawnSync } from 'node:child_process';
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

const said = (...args: readonly string[]): boolean =>
  spawnSync('docker', args, { stdio: 'ignore', timeout: 20_000 }).status === 0;

/** Why the container tests cannot run here; null where they can. */
export function withoutEngine(): string | null {
  if (!said('version')) return 'skipped: no container engine answers here';
  if (said('image', 'inspect', BASE_IMAGE)) return null;
  return `skipped: there is no base image ${BASE_IMAGE}; test/containers/engine.sh makes one`;
}

/** Compose as a plugin, or the older program: whichever there is. */
function compose(args: readonly string[], port: number): void {
  const [command, ...first] = said('compose', 'version') ? ['docker', 'compose'] : ['docker-compose'];
  const env = {
    ...process.env,
    COMPOSE_PROJECT_NAME: PROJECT,
    COMPOSE_PROFILES: 'services',
    COMMONFIT_BASE_IMAGE: BASE_IMAGE,
    COMMONFIT_BUILD_NETWORK: process.env.COMMONFIT_BUILD_NETWORK ?? 'host',
    COMMONFIT_PORT: String(port),
  };
  const done = spawnSync(command, [...first, ...args], { cwd: ROOT, env, encoding: 'utf8' });
  if (done.status !== 0) throw new Error(`${args.join(' ')}: ${done.stdout}${done.stderr}`);
}

/** The services of docker-compose.yml, as a user starts them, and what an analyst on this machine needs. */
export class Services {
  private constructor(
    private readonly engine: Engine,
    private readonly stage: Stage,
    readonly port: number,
  ) {}

  /** Builds the images and starts the profile `services`; the analyst's token and authority go into the stage's folder. */
  static async start(stage: Stage): Promise<Services> {
    const port = await freePort();
    compose(['build'], port);
    const { container } = await getContainerRuntimeClient();
    const services = new Services(container.dockerode, stage, port);
    try {
      compose(['up', '-d'], port);
      const admit = ['commonfit', 'admit', '--analyst', 'tester', '--state', '/state'];
      await stage.write('tester.token', await services.run('coordinator', admit));
      await stage.write('ca.pem', await services.run('coordinator', ['cat', '/run/secrets/ca.pem']));
    } catch (error) {
      services.stop();
      throw error;
    }
    return services;
  }

  /** Ends and removes everything, volumes too. */
  stop(): void {
    compose(['down', '--volumes', '--timeout', '20'], this.port);
  }

  /** Until the engine's health check of a service says so. */
  healthy(service: string): Promise<unknown> {
    return until(
      `${service} being healthy`,
      async () => (await (await this.handle(service)).inspect()).State.Health?.Status === 'healthy',
      () => '',
      60_000,
    );
  }

  /** Standard output of a command in the container of a service, which must succeed. */
  async run(service: string, command: readonly string[]): Promise<string> {
    const done = spawnSync('docker', ['exec', await this.idOf(service), ...command], { encoding: 'utf8' });
    if (done.status !== 0) throw new Error(`${command.join(' ')} in ${service}: ${done.stderr}`);
    return done.stdout;
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
    const label = [`com.docker.compose.project=${PROJECT}`, `com.docker.compose.service=${service}`];
    const [found] = await this.engine.listContainers({ all: true, filters: { label } });
    if (found === undefined) throw new Error(`there is no container of ${service}`);
    return found.Id;
  }
}

function freePort(): Promise<number> {
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
