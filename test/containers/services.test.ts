/** The images and services as docker-compose.yml starts them: the same bytes as processes give, whatever happens to a container. */
import { setTimeout as delay } from 'node:timers/promises';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { until } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { type Following, Stage } from '../support/stage.js';
import { BASE_IMAGE, buildImages, outsideSwarm, Services, withoutEngine } from './services.js';

const skipped = withoutEngine();
const SITES = ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'];
const FIT = 'breaks.fit.yaml';
/** Node, the table reader and everything else of ours over the base image. Bytes. */
const SIZE_MOST = 200e6;

/** For `node -e`: what comes of a connection to port 7443 of each host, as JSON. */
const REACH = `
const reach = (host) => new Promise((resolve) => {
  const s = require('net').connect({ host, port: 7443, timeout: 3000 });
  const end = (text) => { s.destroy(); resolve([host, text]); };
  s.on('connect', () => end('reached')).on('timeout', () => end('silence')).on('error', (e) => end(e.code));
});
Promise.all(process.argv.slice(1).map(reach)).then((all) => {
  console.log(JSON.stringify(Object.fromEntries(all)));
  process.exit();
});`;

/** A swarm takes a minute more, and longer where the machine is busy. */
const long = process.env.COMMONFIT_LONG === '1';

let stage: Stage;
let services: Services;
let byProcesses = '';

async function resultOfProcesses(): Promise<string> {
  await stage.serve();
  const url = stage.address.replace(/^http/, 'ws');
  expect(await stage.start(programs.generateDemo, '--out', '.', '--url', url).end()).toMatchObject({
    code: 0,
  });
  for (const site of SITES) {
    await stage.admit(site);
    await stage.worker('approve', `${site}.site.yaml`, FIT);
    stage.join(site);
  }
  const following = stage.submit(FIT);
  await following.program.end(120_000);
  const { result } = await following.outcome();
  for (const site of SITES) await stage.workerOf(site).kill();
  await stage.killCoordinator();
  return result;
}

/** Waits for a round of a run, then disturbs it; the result is that of the undisturbed run all the same. */
async function disturbed(round: number, disturb: (following: Following) => Promise<void>): Promise<void> {
  const following = services.submit(FIT);
  await following.round(round);
  await disturb(following);
  expect(await services.resultOf(following)).toBe(byProcesses);
}

const stillRuns = (following: Following): void => expect(following.has('outcome')).toBe(undefined);

describe.skipIf(skipped !== null)(`services in containers${skipped === null ? '' : ` (${skipped})`}`, () => {
  beforeAll(async () => {
    stage = await Stage.open('containers');
    [byProcesses] = await Promise.all([resultOfProcesses(), buildImages()]);
    services = await Services.start(stage);
  });
  afterAll(async () => {
    await services?.stop();
    await stage?.close();
  });

  test.each(['coordinator', ...SITES])('%s is healthy', async (service) => {
    await services.healthy(service);
  });

  test('the run comes out with the bytes of the same run by processes', async () => {
    const following = services.submit(FIT);
    expect(await services.resultOf(following)).toBe(byProcesses);
    expect((await following.program.end()).code).toBe(0);
    expect(JSON.parse(byProcesses)).toMatchObject({ outcome: 'solved', rowsTotal: 12_000 });
  });

  test('the logs say which kernel computes, and what left', async () => {
    const log = await services.logOf('castlefen');
    expect(log).toMatch(
      /Connected to wss:\/\/coordinator:7443\/v1\/site as castlefen \(commonfit [\d.]+\), with the kernel \w+, \w+, Node/,
    );
    // the plain kernel is for a build without the compiled ones
    expect(log).not.toContain('kernel plain');
    expect(log).toMatch(/Run \S+ ended: solved\. In all [\d,]+ numbers/);
  });

  test('a worker that is paused holds the run up, and no more', async () => {
    await disturbed(2, async (following) => {
      const worker = await services.handle('castlefen');
      await worker.pause();
      await delay(2000);
      stillRuns(following);
      await worker.unpause();
    });
  });

  test('a worker that is killed and started again goes on', async () => {
    await disturbed(2, async (following) => {
      const worker = await services.handle('harrowmere');
      await worker.kill();
      await delay(1000);
      stillRuns(following);
      await worker.start();
    });
  });

  test('a worker whose network is taken away and given back goes on', async () => {
    await disturbed(2, async (following) => {
      const network = await services.networkOf('oakhythe');
      const { id } = await services.handle('oakhythe');
      await network.disconnect({ Container: id });
      await delay(2000);
      stillRuns(following);
      await network.connect({ Container: id });
    });
  });

  test('a coordinator that is killed takes its run up from its volume', async () => {
    await disturbed(2, async (following) => {
      const coordinator = await services.handle('coordinator');
      await coordinator.kill();
      await delay(1000);
      stillRuns(following);
      await coordinator.start();
    });
  });

  test('a worker reaches the coordinator, no other worker, and nothing outside', async () => {
    const others = SITES.filter((name) => name !== 'castlefen');
    const addresses: string[] = [];
    for (const site of others) {
      const { NetworkSettings } = await (await services.handle(site)).inspect();
      addresses.push(...Object.values(NetworkSettings.Networks).map(({ IPAddress }) => IPAddress));
    }
    expect(addresses).toHaveLength(3);
    // documentation addresses of RFC 5737 stand for the world
    const hosts = ['coordinator', ...others, ...addresses, '192.0.2.1'];
    const reached: Record<string, string> = JSON.parse(
      await services.run('castlefen', ['node', '-e', REACH, ...hosts]),
    );
    expect(reached.coordinator).toBe('reached');
    for (const site of others) expect(reached[site], site).toMatch(/^(ENOTFOUND|EAI_AGAIN|silence)$/);
    // a refusal would come from the other worker itself
    for (const address of [...addresses, '192.0.2.1'])
      expect(reached[address], address).toMatch(/^(ENETUNREACH|EHOSTUNREACH|silence)$/);
    const network = await services.networkOf('castlefen');
    expect(await network.inspect()).toMatchObject({ Internal: true });
  });

  test.each(['coordinator', ...SITES])(
    '%s runs as no root, on a read-only file system, within limits',
    async (service) => {
      const { Config, HostConfig } = await (await services.handle(service)).inspect();
      expect(Config.User).toBe('10001:10001');
      expect(HostConfig).toMatchObject({ ReadonlyRootfs: true, CapDrop: ['ALL'], Memory: 2 ** 30 });
      await expect(services.run(service, ['touch', '/app/written'])).rejects.toThrow('Read-only file system');
      if (service !== 'coordinator')
        await expect(services.run(service, ['touch', '/table/written'])).rejects.toThrow(
          'Read-only file system',
        );
      expect(await services.run(service, ['head', '-n', '1', '/app/THIRD-PARTY'])).toContain('licence');
    },
  );

  test('the images are at most 200 MB over their base', async () => {
    const base = await services.sizeOf(BASE_IMAGE);
    for (const image of ['commonfit-coordinator', 'commonfit-worker'])
      expect((await services.sizeOf(image)) - base).toBeLessThan(SIZE_MOST);
  });

  test('SIGTERM ends a worker with 0, and the coordinator too', async () => {
    for (const service of ['oakhythe', 'coordinator']) {
      const container = await services.handle(service);
      await container.stop({ t: 20 });
      const { State } = await until(`the end of ${service}`, async () => {
        const seen = await container.inspect();
        return seen.State.Running ? null : seen;
      });
      expect(State.ExitCode).toBe(0);
    }
  });

  test.skipIf(!long)(
    `the same file deployed as a stack fits the same bytes${long ? '' : ' (skipped without COMMONFIT_LONG=1)'}`,
    async (context) => {
      if (!(await outsideSwarm())) context.skip('this engine is in a swarm already');
      try {
        const stack = await services.toStack();
        await stack.healthy('coordinator');
        const following = stack.submit(FIT);
        expect(await stack.resultOf(following)).toBe(byProcesses);
      } finally {
        await Services.leaveSwarm();
      }
    },
  );
});
