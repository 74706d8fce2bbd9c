import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { setSmallScenario } from '../support/small-scenario.js';
import { type Following, roundsOf, Stage } from '../support/stage.js';

const SITES = ['harrowmere', 'castlefen'];

let stage: Stage;
let undisturbed = '';
let roundsUndisturbed: unknown[] = [];

beforeAll(async () => {
  stage = await Stage.open('killed-coordinator');
  await setSmallScenario(stage, 2000, SITES);
  for (const site of SITES) stage.join(site);
  const following = stage.submit('long.fit.yaml');
  const { code, result } = await following.outcome();
  expect(code).toBe(0);
  undisturbed = result;
  roundsUndisturbed = roundsOf(following.events());
}, 60_000);
afterAll(() => stage?.close());

async function killAndServe(): Promise<void> {
  await stage.killCoordinator();
  await stage.serve();
}

/** The watching command lived through it all and told each round once. */
async function expectUndisturbed(following: Following): Promise<void> {
  const { code, event, result } = await following.outcome();
  expect(event).toMatchObject({ outcome: 'solved', reason: null });
  expect(code).toBe(0);
  expect(result).toBe(undisturbed);
  expect(roundsOf(following.events())).toEqual(roundsUndisturbed);
}

describe('a run under way goes on to the same bytes where the coordinator is killed', () => {
  test('while it waits for a site', async () => {
    await stage.workerOf('castlefen').kill();
    const following = stage.submit('long.fit.yaml');
    await following.event('waiting');
    await killAndServe();
    stage.join('castlefen');
    await expectUndisturbed(following);
  });

  test('while a site is surveyed', async () => {
    stage.workerOf('castlefen').signal('SIGSTOP');
    const following = stage.submit('long.fit.yaml');
    const run = await following.run();
    await stage.workerOf('harrowmere').says(new RegExp(`"event":"answered","run":"${run}","ask":1`));
    await killAndServe();
    stage.workerOf('castlefen').signal('SIGCONT');
    await expectUndisturbed(following);
  });

  test('with an ask open', async () => {
    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 7, 'castlefen');
    await killAndServe();
    const resumed = await following.event('resumed');
    expect(resumed.round).toBeGreaterThanOrEqual(7);
    stage.workerOf('castlefen').signal('SIGCONT');
    await expectUndisturbed(following);
  });

  test('again and again, wherever it stands', async () => {
    const following = stage.submit('long.fit.yaml');
    for (const round of [1, 9]) {
      await following.round(round);
      await killAndServe();
    }
    await expectUndisturbed(following);
    expect(following.events().filter(({ event }) => event === 'resumed')).toHaveLength(2);
  });

  test('together with every worker', async () => {
    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 10, 'harrowmere');
    await Promise.all([stage.killCoordinator(), ...SITES.map((site) => stage.workerOf(site).kill())]);
    await stage.serve();
    for (const site of SITES) stage.join(site);
    await expectUndisturbed(following);
  });
});

test('a run that has ended is the same after the coordinator was killed; a second coordinator is kept off', async () => {
  const following = stage.submit('long.fit.yaml');
  await expectUndisturbed(following);
  await killAndServe();
  const run = await following.run();
  const again = await stage.analyst('result', run, '--out', 'again');
  expect(again.code).toBe(0);
  expect(await stage.read('again/result.json')).toBe(undisturbed);
  const second = await stage.commonfit('serve', '--listen', '127.0.0.1:0', '--state', 'state');
  expect(second.code).toBe(7);
  expect(second.stderr.replace(/\s+/g, ' ')).toContain(
    `Process ${stage.coordinator?.pid} uses this state folder`,
  );
});
