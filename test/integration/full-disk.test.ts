/** Disks that are full and folders that are read only, on small file systems of their own. */
import { mkdir, readdir, readFile, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { afterEach, beforeAll, describe, expect, test } from 'vitest';
import type { Ended } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { longFit, setSmallScenario, siteFileOf, smallTable } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';
import { mayMount, Volume } from '../support/volume.js';

const plain = (text: string): string => text.replace(/\s+/g, ' ').trim();
const SITES = ['harrowmere', 'castlefen'];

const opened: { close(): Promise<void> }[] = [];
afterEach(async () => {
  for (const one of opened.splice(0).reverse()) await one.close();
});
async function stageAndVolume(size: string): Promise<[Stage, Volume]> {
  const volume = await Volume.open(size);
  opened.push(volume);
  const stage = await Stage.open('full-disk');
  opened.push(stage);
  return [stage, volume];
}

function expectMachineInTheWay({ code, stderr }: Ended, says: RegExp): void {
  expect(plain(stderr)).toMatch(says);
  expect(stderr).not.toContain('defect');
  expect(code).toBe(7);
}

beforeAll(() => {
  if (!mayMount) console.warn('full-disk.test.ts is skipped: this user may not mount file systems.');
});

describe.skipIf(!mayMount)('a full disk', PATIENT, () => {
  test('at the start of the coordinator: 7', async () => {
    const [stage, volume] = await stageAndVolume('256k');
    await volume.fill();
    const state = join(volume.path, 'state');
    const ended = await stage.commonfit('serve', '--listen', '127.0.0.1:0', '--state', state);
    expectMachineInTheWay(
      ended,
      /The state folder cannot be read or written: ENOSPC.*--state\. \[state-unwritable\]$/,
    );
  });

  test('in the middle of a run: it stands still, and once there is space ends with the same bytes', async () => {
    const [stage, volume] = await stageAndVolume('8m');
    await setSmallScenario(stage, 400, SITES, join(volume.path, 'state'));
    for (const site of SITES) stage.join(site);
    const undisturbed = await stage.submit('long.fit.yaml').outcome();
    expect(undisturbed.code).toBe(0);

    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 5, 'castlefen');
    await volume.fill();
    stage.workerOf('castlefen').signal('SIGCONT');
    await following.program.says('The run stands still until the coordinator is started again:');
    const ready = await fetch(`${stage.address}/health/ready`);
    expect(ready.status).toBe(503);
    expect(await ready.json()).toMatchObject({ code: 'state-unwritable' });
    const runs = await stage.analyst('runs', '--json');
    const listed = runs.stdout
      .trim()
      .split('\n')
      .map((line) => JSON.parse(line) as { reason: string | null });
    expect(listed.filter(({ reason }) => reason?.includes('ENOSPC'))).toHaveLength(1);

    const refused = await stage.analyst('submit', 'long.fit.yaml');
    expect(plain(refused.stderr)).toMatch(/ENOSPC.*\[state-unwritable\]$/);
    expect(refused.code).toBe(4);
    expect(await readdir(join(volume.path, 'state', 'runs'))).toHaveLength(2);

    await volume.free();
    await stage.killCoordinator();
    await stage.serve();
    const { code, event, result } = await following.outcome();
    expect({ code, outcome: event.outcome }).toEqual({ code: 0, outcome: 'solved' });
    expect(result).toBe(undisturbed.result);
    const run = join(volume.path, 'state', 'runs', await following.run());
    expect((await stage.commonfit('replay', run)).code).toBe(0);
    const numbers = (await readFile(join(run, 'rounds.csv'), 'utf8')).trim().split('\n').slice(1);
    expect(numbers.map((line) => Number(line.split(',')[0]))).toEqual(numbers.map((_, index) => index + 1));
  });

  test('at a site in the middle of a run: the run ends as refused and names the site', async () => {
    const [stage, volume] = await stageAndVolume('512k');
    await setSmallScenario(stage, 100, SITES);
    const file = join(volume.path, 'castlefen.site.yaml');
    const text = siteFileOf(stage, 'castlefen', `{csv: ${join(stage.folder, 'castlefen.csv')}}`, [
      'curvature-most: 0',
    ]);
    await writeFile(file, text.replace('./castlefen.token', join(stage.folder, 'castlefen.token')));
    stage.join('harrowmere');
    const worker = stage.joinFile('castlefen', file);
    const following = stage.submit('long.fit.yaml');
    await stage.holdAt(following, 3, 'castlefen');
    await volume.fill();
    worker.signal('SIGCONT');
    const { code, event } = await following.outcome();
    expect(code).toBe(14);
    expect(event.reason).toMatch(
      /site castlefen refused: The site cannot write to its disk\. .*\[state-unwritable\]/,
    );
    expect(worker.stderr).toContain('castlefen.ledger: The file cannot be written (ENOSPC)');
    expect(worker.running).toBe(true);
  });

  test('in a rehearsal, wherever it comes: 7, and nothing goes on', { timeout: 300_000 }, async () => {
    const [stage, volume] = await stageAndVolume('1m');
    await stage.write('all.csv', utilities(smallTable('harrowmere', 200), smallTable('castlefen', 200)));
    await stage.write('long.fit.yaml', longFit(SITES));
    const ends = new Set<number | null>();
    for (const kib of [0, 56, 96]) {
      const out = join(volume.path, `out-${kib}`);
      await volume.fill(kib);
      const rehearsal = stage.start(
        programs.commonfit,
        ...['rehearse', 'long.fit.yaml', '--rows', 'all.csv', '--by', 'utility'],
        ...['--out', out, '--keep', '--json'],
      );
      const ended = await rehearsal.end(90_000);
      expect([0, 7]).toContain(ended.code);
      expect(ended.stderr).not.toContain('defect');
      if (ended.code === 7) expect(plain(ended.stderr)).toMatch(/\[state-unwritable\]/);
      ends.add(ended.code);
      await volume.free();
    }
    expect(ends).toContain(7);
  });
});

/** Tables of two sites as one, with the column that says whose a row is. */
function utilities(first: string, second: string): string {
  const [header, ...rows] = first.trim().split('\n');
  const more = second.trim().split('\n').slice(1);
  return [
    `utility,${header}`,
    ...rows.map((row) => `harrowmere,${row}`),
    ...more.map((row) => `castlefen,${row}`),
    '',
  ].join('\n');
}

describe.skipIf(!mayMount)('a folder that is read only: 7', PATIENT, () => {
  test('of the coordinator, of a site, and for what commands write', async () => {
    const [stage, volume] = await stageAndVolume('256k');
    await stage.serve();
    const site = join(volume.path, 'castlefen.site.yaml');
    await writeFile(site, siteFileOf(stage, 'castlefen', '{csv: ./castlefen.csv}'));
    await writeFile(join(volume.path, 'castlefen.token'), 'token\n');
    await mkdir(join(volume.path, 'state'));
    await stage.write('long.fit.yaml', longFit(SITES));
    await stage.write('all.csv', utilities(smallTable('harrowmere', 20), smallTable('castlefen', 20)));
    await volume.readOnly();
    const state = join(volume.path, 'state');

    const served = await stage.commonfit('serve', '--listen', '127.0.0.1:0', '--state', state);
    expectMachineInTheWay(served, /The state folder cannot be read or written: EROFS.*\[state-unwritable\]$/);
    const joined = await stage.worker('join', site);
    expectMachineInTheWay(
      joined,
      /castlefen\.ledger: The file cannot be written \(EROFS\)\..*\[state-unwritable\]$/,
    );
    const out = join(volume.path, 'out');
    const token = await stage.commonfit('admit', 'oakhythe', '--state', state, '--out', out);
    expectMachineInTheWay(token, /EROFS.*\[state-unwritable\]$/);
    const rehearsed = await stage.commonfit(
      ...['rehearse', 'long.fit.yaml', '--rows', 'all.csv', '--by', 'utility', '--out', out, '--keep'],
    );
    expectMachineInTheWay(rehearsed, /EROFS.*\[state-unwritable\]$/);
  });
});
