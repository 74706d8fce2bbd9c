/** What an operator sees: metrics, health, the plain log, all runs in one terminal. */
import { readFile } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { programs } from '../support/programs.js';
import { longFit, setSmallScenario } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

const SITES = ['harrowmere', 'castlefen'];
let stage: Stage;

const get = async (path: string, token?: string): Promise<Response> =>
  fetch(
    `${stage.address}${path}`,
    token === undefined ? {} : { headers: { authorization: `Bearer ${token}` } },
  );
const tokenOf = async (file: string): Promise<string> =>
  (await readFile(join(stage.folder, file), 'utf8')).trim();

beforeAll(async () => {
  stage = await Stage.open('watching');
  await setSmallScenario(stage, 600, SITES);
  for (const site of SITES) stage.join(site);
}, PATIENT.timeout);
afterAll(() => stage?.close());

describe('watching a coordinator', PATIENT, () => {
  test('watch --all follows several runs, each line behind its run, and ends when none is left', async () => {
    stage.workerOf('castlefen').signal('SIGSTOP');
    const runs: string[] = [];
    for (const title of ['One', 'Two']) {
      await stage.write('next.fit.yaml', longFit(SITES).replace('title: ', `title: ${title}, `));
      runs.push(await stage.submit('next.fit.yaml').run());
    }
    const watching = stage.startAnalyst('watch', '--all');
    await watching.says('Two');
    const json = stage.startAnalyst('watch', '--all', '--json');
    await json.says('Two');
    stage.workerOf('castlefen').signal('SIGCONT');
    const { code, stdout } = await watching.end(60_000);
    expect(code).toBe(0);
    const prefixes = runs.map((run) => run.split('-').at(-1) ?? '');
    const lines = stdout.split('\n').filter((line) => line !== '');
    for (const line of lines) expect(prefixes).toContain(line.slice(0, 8));
    for (const prefix of prefixes)
      expect(lines.filter((line) => line.startsWith(prefix)).join('\n')).toContain('Solved.');
    expect((await json.end(60_000)).code).toBe(0);
    const outcomes = json
      .jsonLines<{ event: string; run: string }>()
      .filter(({ event }) => event === 'outcome');
    expect(outcomes.map(({ run }) => run).sort()).toEqual([...runs].sort());
    const after = await stage.analyst('watch', '--all');
    expect(after).toMatchObject({ code: 0, stdout: 'No run is under way.\n' });
  });

  test('watch takes one run or --all', async () => {
    expect((await stage.analyst('watch')).code).toBe(2);
    expect((await stage.analyst('watch', 'x', '--all')).code).toBe(2);
  });

  test('/metrics is for analysts, and counts what has happened', async () => {
    expect((await get('/metrics')).status).toBe(401);
    expect((await get('/metrics', await tokenOf('castlefen.token'))).status).toBe(401);
    const reply = await get('/metrics', await tokenOf('state/analyst.token'));
    expect(reply.headers.get('content-type')).toContain('text/plain');
    const text = await reply.text();
    expect(text).toContain('commonfit_runs_ended_total{outcome="solved"} 2');
    expect(text).toMatch(/commonfit_rounds_total\{rung="proximal"\} \d{2}/);
    for (const site of SITES) {
      expect(text).toContain(`commonfit_links{site="${site}"} 1`);
      expect(text).toMatch(new RegExp(`commonfit_answer_seconds_count\\{site="${site}"\\} \\d{2}`));
      expect(text).toMatch(new RegExp(`commonfit_bytes_total\\{site="${site}",direction="up"\\} \\d{4}`));
    }
  });

  test('health needs no token', async () => {
    const well = await stage.commonfit('health', '--url', stage.address);
    expect(well).toMatchObject({ code: 0, stdout: 'Ready.\n' });
    expect((await stage.commonfit('health', '--url', 'http://127.0.0.1:9')).code).toBe(4);
  });

  test('serve --log plain: sentences of runs and sites on standard error', async () => {
    await stage.workerOf('castlefen').kill();
    await stage.killCoordinator();
    const port = new URL(stage.address).port;
    const args = ['serve', '--listen', `127.0.0.1:${port}`, '--state', stage.state, '--log', 'plain'];
    const serving = stage.start(programs.commonfit, ...args);
    await serving.says('harrowmere connected');
    stage.join('castlefen');
    const run = await stage.submit('long.fit.yaml').run();
    await serving.says('Solved.');
    const short = run.split('-').at(-1);
    expect(serving.stderr).toMatch(
      new RegExp(`^\\d\\d:\\d\\d:\\d\\d  ${short}  Round 2 .* off the optimum`, 'm'),
    );
    expect(serving.stderr).not.toContain('{');
  });
});
