import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import type { Ended } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { PATIENT, Stage } from '../support/stage.js';

/** What an analyst and four custodians type, each in a terminal of their own, on the tables of the example. */
const SITES = ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'];

let stage: Stage;
let watched: Ended;
let run = '';

beforeAll(async () => {
  stage = await Stage.open('fit-by-hand');
  await stage.serve();
  const url = `${stage.address.replace(/^http/, 'ws')}/v1/site`;
  const generated = await stage.start(programs.generateDemo, '--out', '.', '--url', url).end();
  expect(generated).toMatchObject({ code: 0, stderr: '' });
  await Promise.all(SITES.map((site) => stage.admit(site)));
  const approved = await Promise.all(
    SITES.map((site) => stage.worker('approve', `${site}.site.yaml`, 'breaks.fit.yaml')),
  );
  expect(approved.map(({ code }) => code)).toEqual([0, 0, 0, 0]);
  const submitted = stage.startAnalyst('submit', 'breaks.fit.yaml', '--watch');
  await submitted.says('is accepted');
  for (const site of SITES) stage.join(site);
  watched = await submitted.end();
  run = /Run (\S+) is accepted/.exec(watched.stdout)?.[1] ?? '';
}, PATIENT.timeout);
afterAll(() => stage?.close());

const plain = (text: string): string => text.replace(/\s+/g, ' ');

describe('submit --watch', () => {
  test('tells the run from its acceptance to its outcome and ends with 0', () => {
    expect(watched).toMatchObject({ code: 0, stderr: '' });
    const text = plain(watched.stdout);
    for (const site of SITES) expect(text).toContain(`${site} is here`);
    expect(text).toContain('12,000 rows at 4 sites');
    expect(text).toMatch(/Round 2 is .* off/);
    expect(text).toContain('Solved. “Pipe breaks per kilometre-year” took');
    // a path is not broken
    const lines = watched.stdout.split('\n').filter((line) => !line.includes(stage.folder));
    for (const line of lines) expect(line.length).toBeLessThanOrEqual(80);
  });

  test('leaves a result within the tolerance, measured', async () => {
    const result = JSON.parse(await stage.resultOf(run)) as ResultDocument;
    expect(result).toMatchObject({ format: 1, outcome: 'solved', reason: null, rowsTotal: 12_000 });
    expect(result.fits).toHaveLength(1);
    expect(result.fits[0].certificate?.relativeGap).toBeLessThanOrEqual(1e-8);
    expect(Object.keys(result.fits[0].coefficients)).toHaveLength(14);
    // older pipes break more often: the invented world is built that way
    const age = result.inference?.marginalEffects.find(({ term }) => term === 'age_years');
    expect(age?.lower).toBeGreaterThan(0);
    expect(result.sites.map(({ site, rowsUsed }) => [site, rowsUsed])).toEqual([
      ['harrowmere', 6000],
      ['lindell-bay', 3500],
      ['castlefen', 1800],
      ['oakhythe', 700],
    ]);
  });
});

describe('afterwards', () => {
  test('runs lists it', async () => {
    const { code, stdout } = await stage.analyst('runs');
    expect(code).toBe(0);
    expect(plain(stdout)).toMatch(
      new RegExp(`${run} “Pipe breaks per kilometre-year” ended as solved after \\d+ rounds`),
    );
    const asJson = await stage.analyst('runs', '--json');
    expect(JSON.parse(asJson.stdout.split('\n')[0])).toMatchObject({
      run,
      state: 'ended',
      outcome: 'solved',
    });
  });

  test('result shows it; --out writes the very bytes that the coordinator keeps', async () => {
    const shown = await stage.analyst('result', run);
    expect(shown.code).toBe(0);
    expect(shown.stdout).toContain('age_years');
    expect((await stage.analyst('result', run, '--out', 'breaks-result')).code).toBe(0);
    for (const file of ['result.json', 'coefficients.csv', 'rounds.csv'])
      expect(await stage.read(join('breaks-result', file))).toBe(await stage.resultOf(run, file));
  });

  test('watch --json replays the round log line by line, the outcome last', async () => {
    const watching = stage.startAnalyst('watch', run, '--json');
    expect((await watching.end()).code).toBe(0);
    const events = watching.jsonLines<LogEvent>();
    expect(events[0]).toMatchObject({ event: 'accepted', run, sites: SITES });
    expect(events.at(-1)).toMatchObject({ event: 'outcome', outcome: 'solved', certificate: 'measured' });
    const rounds = events.filter((event) => event.event === 'round').map(({ round }) => round);
    expect(rounds).toEqual(rounds.map((_, index) => index + 1));
    expect(rounds.length).toBeGreaterThan(1);
    const kept = await stage.resultOf(run, 'log.jsonl');
    expect(watching.stdout).toBe(kept);
  });

  test('a worker that is told to stop leaves with 0 and has written what left', async () => {
    const worker = stage.workerOf('oakhythe');
    worker.signal('SIGTERM');
    expect((await worker.end()).code).toBe(0);
    expect(await stage.read('oakhythe.ledger')).toContain(`"run":"${run}"`);
  });
});

describe('what does not go well', () => {
  test('a run that waits for a site names it and can be cancelled', async () => {
    const text = await stage.read('breaks.fit.yaml');
    await stage.write('waits.fit.yaml', text.replace('oakhythe]', 'oakhythe, saltmarsh]'));
    const following = stage.submit('waits.fit.yaml');
    const { sites } = await following.event('waiting');
    expect(sites).toContain('saltmarsh');
    const { code, stdout } = await stage.analyst('cancel', await following.run());
    expect(code).toBe(0);
    expect(plain(stdout)).toContain('It is told to end.');
    const outcome = await following.outcome();
    expect(outcome.code).toBe(17);
    expect(outcome.event).toMatchObject({ outcome: 'cancelled', reason: 'Cancelled by the analyst.' });
    expect(JSON.parse(outcome.result)).toMatchObject({ outcome: 'cancelled', fits: [] });
  });

  test('cancelling a run that has ended changes nothing and says so', async () => {
    const before = await stage.resultOf(run);
    const { code, stdout } = await stage.analyst('cancel', run);
    expect(code).toBe(0);
    expect(stdout).toContain('It has ended.');
    expect(plain(stdout)).toContain('ended as solved');
    expect(await stage.resultOf(run)).toBe(before);
  });

  test('a token that is not an analyst’s: 5, and what to do', async () => {
    await stage.write('wrong.token', 'not-a-token\n');
    for (const file of ['wrong.token', 'harrowmere.token']) {
      const { code, stderr } = await stage.commonfit('runs', '--url', stage.address, '--token-file', file);
      expect(code).toBe(5);
      expect(plain(stderr)).toMatch(/token.*[unauthorised]/);
    }
  });

  test('a worker with a token that the coordinator does not know: 6, and what to do', async () => {
    const file = (await stage.read('castlefen.site.yaml')).replace('castlefen.token', 'wrong.token');
    await stage.write('stranger.site.yaml', file);
    const { code, stderr } = await stage.worker('join', 'stranger.site.yaml');
    expect(code).toBe(6);
    expect(stderr).toContain('Ask the analyst for a token of this site');
  });

  test('a run that is not there: 6', async () => {
    for (const command of ['watch', 'result', 'cancel']) {
      const { code, stderr } = await stage.analyst(command, '20310504-101500-4f6c2a91');
      expect(code).toBe(6);
      expect(plain(stderr)).toContain('20310504-101500-4f6c2a91');
    }
  });

  test('Ctrl-C ends the watching with 130 and says how to come back; serve stops with 0', async () => {
    const text = await stage.read('waits.fit.yaml');
    await stage.write('waits-on.fit.yaml', text.replace('title: ', 'title: Once more, '));
    const watching = stage.startAnalyst('submit', 'waits-on.fit.yaml', '--watch');
    await watching.says('saltmarsh');
    watching.signal('SIGINT');
    const { code, stderr } = await watching.end();
    expect(code).toBe(130);
    expect(plain(stderr)).toMatch(/the run goes on. To come back: commonfit watch \S+/);
    const { coordinator } = stage;
    coordinator?.signal('SIGTERM');
    expect((await coordinator?.end())?.code).toBe(0);
    const down = await stage.analyst('runs');
    expect(down.code).toBe(4);
    expect(plain(down.stderr)).toContain('Look whether `commonfit serve` runs there');
  });
});
