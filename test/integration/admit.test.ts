import { stat } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { setSmallScenario } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

/** Who is let in, for how long, and to do what: on a coordinator that runs. */
let stage: Stage;
const plain = (text: string): string => text.replace(/\s+/g, ' ');
const admit = (...args: readonly string[]) => stage.commonfit('admit', ...args, '--state', 'state');

beforeAll(async () => {
  stage = await Stage.open('admit');
  await setSmallScenario(stage, 60, ['harrowmere', 'castlefen']);
}, PATIENT.timeout);
afterAll(() => stage?.close());

describe('analysts', () => {
  test('one who may watch lists runs and is refused by name when it submits or cancels: 5, HTTP 403', async () => {
    const admitted = await admit('--analyst', 'ines', '--may', 'watch', '--out', 'ines.token');
    expect(admitted.code).toBe(0);
    const as = ['--url', stage.address, '--token-file', 'ines.token'];
    expect((await stage.commonfit('runs', ...as)).code).toBe(0);
    const submitted = await stage.commonfit('submit', 'long.fit.yaml', ...as);
    expect(submitted.code).toBe(5);
    expect(plain(submitted.stderr)).toContain('Analyst ines may watch, not submit or cancel.');

    const run = await stage.submit('long.fit.yaml').run();
    expect((await stage.commonfit('cancel', run, ...as)).code).toBe(5);
    const authorization = `Bearer ${(await stage.read('ines.token')).trim()}`;
    const refused = await fetch(`${stage.address}/v1/runs/${run}/cancel`, {
      method: 'POST',
      headers: { authorization },
    });
    expect(refused.status).toBe(403);
    expect(await refused.json()).toMatchObject({ status: 403, code: 'unauthorised' });
    expect((await stage.analyst('cancel', run)).code).toBe(0);
  });
});

describe('sites', () => {
  test('an expired token is refused in words at the site: 6', async () => {
    await admit('castlefen', '--expires', '1s', '--out', 'short.token');
    await stage.write('castlefen.token', await stage.read('short.token'));
    await new Promise((resolve) => setTimeout(resolve, 1100));
    const { code, stderr } = await stage.worker('join', 'castlefen.site.yaml');
    expect(code).toBe(6);
    expect(plain(stderr)).toMatch(/The token of site castlefen expired on \d{4}-\d\d-\d\d \d\d:\d\d UTC/);
    expect(plain(stderr)).toContain('Ask the analyst for a token of this site');
  });

  test('a link whose token is revoked is closed, and the worker leaves with 6', async () => {
    const worker = stage.join('harrowmere');
    await worker.says('"event":"connected"');
    const revoked = await admit('harrowmere', '--revoke');
    expect(revoked).toMatchObject({ code: 0, stdout: '' });
    expect((await worker.end()).code).toBe(6);
    const again = await admit('harrowmere', '--revoke');
    expect(again.code).toBe(6);
    expect(plain(again.stderr)).toContain('There is no token of site harrowmere.');
  });
});

test('--list names holder, role, end and last use, and no token; the files stay the owner’s', async () => {
  const { code, stdout } = await admit('--list');
  expect(code).toBe(0);
  const text = plain(stdout);
  expect(text).toMatch(/analyst ines, may watch: issued .* UTC; does not expire; last used .* UTC\./);
  expect(text).toMatch(/site castlefen: issued .* UTC; expired .* UTC; no use is recorded\./);
  expect(text).not.toContain('harrowmere');
  const asJson = await admit('--list', '--json');
  const holders = asJson.stdout
    .trimEnd()
    .split('\n')
    .map((line) => JSON.parse(line));
  expect(holders).toHaveLength(3);
  expect(holders.find(({ name }) => name === 'castlefen')).toMatchObject({ kind: 'site', expired: true });
  for (const file of ['tokens.json', 'token-uses.json'])
    expect((await stat(join(stage.folder, 'state', file))).mode & 0o777).toBe(0o600);
});
