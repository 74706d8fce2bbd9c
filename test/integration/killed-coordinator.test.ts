import { copyFile, rm, stat, truncate } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { until } from '../support/processes.js';
import { setSmallScenario } from '../support/small-scenario.js';
import { type Following, PATIENT, roundsOf, Stage } from '../support/stage.js';

/** Single instants, which the kills at random of the everyday run come by too: COMMONFIT_LONG=1. */
const long = process.env.COMMONFIT_LONG === '1';
const SITES = ['harrowmere', 'castlefen'];

let stage: Stage;
let undisturbed = '';
let runUndisturbed = '';
let roundsUndisturbed: unknown[] = [];

beforeAll(async () => {
  stage = await Stage.open('killed-coordinator');
  await setSmallScenario(stage, 2000, SITES);
  for (const site of SITES) stage.join(site);
  const following = stage.submit('long.fit.yaml');
  const { code, result } = await following.outcome();
  expect(code).toBe(0);
  undisturbed = result;
  runUndisturbed = await following.run();
  roundsUndisturbed = roundsOf(following.events());
}, PATIENT.timeout);
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

describe('a run under way goes on to the same bytes where the coordinator is killed', PATIENT, () => {
  test('while it waits for a site', async () => {
    await stage.workerOf('castlefen').kill();
    const following = stage.submit('long.fit.yaml');
    await following.event('waiting');
    await killAndServe();
    stage.join('castlefen');
    await expectUndisturbed(following);
  });

  test.runIf(long)('while a site is surveyed', async () => {
    stage.workerOf('castlefen').signal('SIGSTOP');
    const following = stage.submit('long.fit.yaml');
    const run = await following.run();
    await stage.workerOf('harrowmere').says(new RegExp(`"event":"answered","run":"${run}","ask":1`));
    await killAndServe();
    stage.workerOf('castlefen').signal('SIGCONT');
    await expectUndisturbed(following);
  });

  test.runIf(long)('with an ask open', async () => {
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
    await following.round(1);
    await killAndServe();
    stage.workerOf('castlefen').signal('SIGSTOP');
    await killAndServe();
    stage.workerOf('castlefen').signal('SIGCONT');
    await expectUndisturbed(following);
    expect(following.has('resumed')).toBeDefined();
  });

  test('together with every worker, and the end of the journal is lost', async () => {
    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 10, 'harrowmere');
    await Promise.all([stage.killCoordinator(), ...SITES.map((site) => stage.workerOf(site).kill())]);
    const journal = join(stage.folder, 'state', 'runs', await following.run(), 'journal');
    await truncate(journal, (await stat(journal)).size - 100);
    await stage.serve();
    for (const site of SITES) stage.join(site);
    await expectUndisturbed(following);
    expect(stage.coordinator?.stderr).toContain('The last record of the journal was cut off');
  });
});

test('runs that have ended stay as they ended; a second coordinator is kept off', PATIENT, async () => {
  const cancelled = stage.submit('long.fit.yaml');
  await stage.holdAt(cancelled, 5, 'castlefen');
  const run = await cancelled.run();
  expect((await stage.analyst('cancel', run)).code).toBe(0);
  const { code, event } = await cancelled.outcome();
  expect(code).toBe(17);
  expect(event).toMatchObject({ outcome: 'cancelled' });
  await killAndServe();
  stage.workerOf('castlefen').signal('SIGCONT');

  const listed = await stage.analyst('runs', '--json');
  const runs = listed.stdout
    .trim()
    .split('\n')
    .map((line) => JSON.parse(line) as { run: string });
  expect(runs.find((summary) => summary.run === run)).toMatchObject({ state: 'ended', outcome: 'cancelled' });
  const again = await stage.analyst('result', runUndisturbed, '--out', 'again');
  expect(again.code).toBe(0);
  expect(await stage.read('again/result.json')).toBe(undisturbed);

  const second = await stage.commonfit('serve', '--listen', '127.0.0.1:0', '--state', 'state');
  expect(second.code).toBe(7);
  expect(second.stderr.replace(/\s+/g, ' ')).toContain(
    `Process ${stage.coordinator?.pid} uses this state folder`,
  );
});

test(
  'a cancellation that was accepted holds, although all that was written after it is lost',
  PATIENT,
  async () => {
    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 5, 'castlefen');
    const run = await following.run();
    const folder = join(stage.folder, 'state', 'runs', run);
    for (const file of ['journal', 'log.jsonl'])
      await copyFile(join(folder, file), join(folder, `${file}.before`));
    expect((await stage.analyst('cancel', run)).code).toBe(0);
    await stage.killCoordinator();
    for (const file of ['journal', 'log.jsonl'])
      await copyFile(join(folder, `${file}.before`), join(folder, file));
    await rm(join(folder, 'result.json'), { force: true });
    await stage.serve();
    stage.workerOf('castlefen').signal('SIGCONT');

    const result = await until('the result', () => stage.resultOf(run).catch(() => null));
    expect(JSON.parse(result)).toMatchObject({ outcome: 'cancelled', reason: 'Cancelled by the analyst.' });
    expect((await following.program.end()).code).toBe(17);
    const replayed = await stage.commonfit('replay', folder, '--json');
    expect(JSON.parse(replayed.stdout)).toMatchObject({ agrees: true, result: 'equal' });
  },
);
