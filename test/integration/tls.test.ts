import { fileURLToPath } from 'node:url';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import type { Program } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { siteFileOf, smallTable } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

/** One coordinator behind TLS, its workers and its analyst: who trusts whom, from end to end. */
const pem = (name: string): string => fileURLToPath(new URL(`../reference/tls/${name}.pem`, import.meta.url));
const plain = (text: string): string => text.replace(/\s+/g, ' ');
const SITES = ['harrowmere', 'castlefen'];
const QUICK_FIT = `commonfit: 1
title: Breaks by age
sites: [harrowmere, castlefen]
response: {column: breaks}
loss: squared
terms: [{column: age_years, unit: year}]
`;

let stage: Stage;
const startServe = (name: string, state: string): Program =>
  stage.start(
    programs.commonfit,
    ...['serve', '--listen', '127.0.0.1:0', '--state', state],
    ...['--tls-cert', pem(`${name}-cert`), '--tls-key', pem(`${name}-key`)],
  );

async function serveTls(name: string, state: string): Promise<string> {
  const said = await startServe(name, state).says(/coordinator is at \S+,/);
  return /coordinator is at (\S+),/.exec(said)?.[1] ?? '';
}

/** The site file of `siteFileOf`, with or without an authority of its own. */
const siteFile = (site: string, authority: string | null): string =>
  siteFileOf(stage, site, `{csv: ./${site}.csv}`).replace(
    `${site}.token}`,
    authority === null ? `${site}.token}` : `${site}.token, ca-file: ${authority}}`,
  );

beforeAll(async () => {
  stage = await Stage.open('tls');
  stage.address = await serveTls('loopback', 'state');
  for (const site of SITES) {
    await stage.write(`${site}.csv`, smallTable(site, 60));
    await stage.write(`${site}.site.yaml`, siteFile(site, pem('loopback-cert')));
    await stage.admit(site);
  }
  await stage.write('quick.fit.yaml', QUICK_FIT);
}, PATIENT.timeout);
afterAll(() => stage?.close());

describe('with the authority named on both sides', () => {
  test('a run goes from its submission to its result over https and wss', async () => {
    expect(stage.address).toMatch(/^https:/);
    for (const site of SITES) stage.join(site);
    const trusting = ['--ca-file', pem('loopback-cert')];
    const submitted = await stage.analyst('submit', 'quick.fit.yaml', '--watch', ...trusting);
    expect(submitted).toMatchObject({ code: 0, stderr: '' });
    expect(submitted.stdout).toContain('Solved.');
    const runs = await stage.analyst('runs', '--json', ...trusting);
    const { run } = JSON.parse(runs.stdout);
    const result = await stage.analyst('result', run, '--json', ...trusting);
    expect(JSON.parse(result.stdout)).toMatchObject({ outcome: 'solved', rowsTotal: 120 });
    expect((await stage.analyst('result', 'none', ...trusting)).code).toBe(6);
  });
});

describe('a certificate that is not trusted', () => {
  test('an analyst without its authority: 9, one line', async () => {
    for (const more of [[], ['--ca-file', pem('expired-cert')]]) {
      const { code, stdout, stderr } = await stage.analyst('runs', ...more);
      expect({ code, stdout }).toEqual({ code: 9, stdout: '' });
      expect(plain(stderr).trim()).toBe(
        `The certificate of ${stage.address} is not trusted: it is a self-signed certificate and not the one trusted here. ` +
          'Name the certificate of its authority with --ca-file, or renew the certificate. [certificate-untrusted]',
      );
    }
  });

  test('watching does not try again and again', async () => {
    const { code, stderr } = await stage.analyst('watch', '20310504-101500-4f6c2a91');
    expect(code).toBe(9);
    expect(stderr).not.toContain('trying again');
  });

  test('a worker without its authority: 6, in words', async () => {
    await stage.write('trustless.site.yaml', siteFile('harrowmere', null));
    const { code, stderr } = await stage.worker('join', 'trustless.site.yaml');
    expect(code).toBe(6);
    expect(plain(stderr)).toContain('is not trusted: it is a self-signed certificate');
  });

  test('one that has expired: 9 and 6', async () => {
    const address = await serveTls('expired', 'expired-state');
    const { code, stderr } = await stage.commonfit(
      ...['runs', '--url', address, '--token-file', 'expired-state/analyst.token'],
      ...['--ca-file', pem('expired-cert')],
    );
    expect(code).toBe(9);
    expect(plain(stderr)).toContain(
      'is not trusted: it or its authority has expired, or the clock of this machine is ahead.',
    );
    const text = siteFile('harrowmere', pem('expired-cert')).replace(
      /wss:[^,]+/,
      address.replace('https', 'wss'),
    );
    await stage.write('expired.site.yaml', text);
    const joined = await stage.worker('join', 'expired.site.yaml');
    expect(joined.code).toBe(6);
    expect(plain(joined.stderr)).toContain(
      'is not trusted: it or its authority has expired, or the clock of this machine is ahead.',
    );
  });
});

describe('plain text off loopback is refused', () => {
  test('by the coordinator: 7', async () => {
    const { code, stderr } = await stage.commonfit('serve', '--listen', '0.0.0.0:0', '--state', 'open-state');
    expect(code).toBe(7);
    expect(plain(stderr)).toContain('is not loopback, and there is no certificate');
  });

  test('by the worker: 3', async () => {
    const text = siteFile('harrowmere', null).replace(/wss:[^,]+/, 'ws://coordinator.example:7443');
    await stage.write('plain.site.yaml', text);
    const { code, stderr } = await stage.worker('join', 'plain.site.yaml');
    expect(code).toBe(3);
    expect(plain(stderr)).toContain('which would send the token unencrypted');
  });

  test('by the analyst’s commands: 2', async () => {
    const { code, stderr } = await stage.commonfit(
      ...['runs', '--url', 'http://coordinator.example:7443', '--token-file', 'state/analyst.token'],
    );
    expect(code).toBe(2);
    expect(plain(stderr)).toContain('which would send the token unencrypted');
  });
});
