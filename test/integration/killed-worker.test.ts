import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { until } from '../support/processes.js';
import { SMALL_SITES, setSmallScenario } from '../support/small-scenario.js';
import { type Following, PATIENT, roundsOf, Stage } from '../support/stage.js';

let stage: Stage;
let undisturbed = '';
let roundsUndisturbed: unknown[] = [];

beforeAll(async () => {
  stage = await Stage.open('killed-worker');
  await setSmallScenario(stage, 2000);
  for (const site of SMALL_SITES) stage.join(site);
  const following = stage.submit('long.fit.yaml');
  const { code, result } = await following.outcome();
  expect(code).toBe(0);
  undisturbed = result;
  roundsUndisturbed = roundsOf(following.events());
}, PATIENT.timeout);
afterAll(() => stage?.close());

/** Numbers that the custodian's ledger of a site has for a run. */
async function ledgerNumbers(site: string, run: string): Promise<number> {
  const lines = (await stage.read(`${site}.ledger`)).trimEnd().split('\n');
  return lines
    .map((line) => JSON.parse(line) as { run?: string; numbers?: number })
    .filter((entry) => entry.run === run)
    .reduce((sum, { numbers = 0 }) => sum + numbers, 0);
}

async function expectUndisturbed(following: Following): Promise<void> {
  const { code, event, result } = await following.outcome();
  expect(event).toMatchObject({ outcome: 'solved', reason: null });
  expect(code).toBe(0);
  expect(result).toBe(undisturbed);
  expect(roundsOf(following.events())).toEqual(roundsUndisturbed);
  const { numbersSent } = JSON.parse(result) as ResultDocument;
  const run = await following.run();
  for (const { site, up } of numbersSent) expect(await ledgerNumbers(site, run)).toBe(up);
}

/** Kills workers, sees the coordinator miss them, and starts them again. */
async function killAndStart(following: Following, sites: readonly string[]): Promise<void> {
  const changes = (site: string, change: 'connected' | 'lost'): number =>
    following
      .events()
      .filter((event) => event.event === 'site' && event.site === site && event.change === change).length;
  const seen = (change: 'connected' | 'lost') => {
    const before = sites.map((site) => changes(site, change));
    return () =>
      until(`sites ${change}`, () => sites.every((site, index) => changes(site, change) > before[index]));
  };
  const [lost, connected] = [seen('lost'), seen('connected')];
  await Promise.all(sites.map((site) => stage.workerOf(site).kill()));
  await lost();
  for (const site of sites) stage.join(site);
  await connected();
}

describe('a run is the same to the bit', PATIENT, () => {
  test('where one worker after the other is killed with an ask open and started again', async () => {
    const following = stage.submit('long.fit.yaml');
    for (const [index, site] of SMALL_SITES.entries()) {
      await stage.holdAt(following, 3 + 8 * index, site);
      await killAndStart(following, [site]);
    }
    await expectUndisturbed(following);
  });

  // every day in test/integration/killed-at-random.test.ts, too
  test.runIf(process.env.COMMONFIT_LONG === '1')('where all workers are killed at once', async () => {
    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 6, 'harrowmere');
    await killAndStart(following, SMALL_SITES);
    await expectUndisturbed(following);
  });

  test('where a worker is killed before it has surveyed its table', async () => {
    stage.workerOf('lindell-bay').signal('SIGSTOP');
    const following = stage.submit('long.fit.yaml');
    await following.event('accepted');
    await killAndStart(following, ['lindell-bay']);
    await expectUndisturbed(following);
  });

  test('where a worker hangs past the deadline and comes back; the round log names it', async () => {
    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 5, 'castlefen');
    const late = await following.event('late', ({ round }) => round > 5);
    expect(late).toMatchObject({ sites: ['castlefen'] });
    stage.workerOf('castlefen').signal('SIGCONT');
    await expectUndisturbed(following);
  });

  test('where a second worker takes the place of one that answers, and the first one leaves', async () => {
    const following = stage.submit('long.fit.yaml');
    await following.round(2);
    const first = stage.workerOf('castlefen');
    stage.join('castlefen');
    await expectUndisturbed(following);
    const { code, stderr } = await first.end();
    expect(code).toBe(6);
    expect(stderr).toContain('Another worker joined as this site');
  });
});
