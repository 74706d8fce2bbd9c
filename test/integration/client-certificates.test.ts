import { readFileSync } from 'node:fs';
import { fileURLToPath } from 'node:url';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { requestTo, type Trust } from '../../coordinator/commands/request.js';
import { startService } from '../../coordinator/service/service.js';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { connectLink } from '../../protocol/link/websocket.js';
import { analystToken, bench, siteToken, start } from '../support/service-bench.js';
import { siteFileOf, smallTable } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';
import { helloOf } from '../support/toy-site.js';

/** A coordinator that asks for certificates: who is let in, and what the others are told. */
const path = (name: string): string =>
  fileURLToPath(new URL(`../reference/tls/${name}.pem`, import.meta.url));
const pem = (name: string): string => readFileSync(path(name), 'utf8');
const pairOf = (name: string) => ({ cert: pem(`client-${name}-cert`), key: pem(`client-${name}-key`) });
const plain = (text: string): string => text.replace(/\s+/g, ' ');

const TLS = { certFile: path('loopback-cert'), keyFile: path('loopback-key') };
const ASKING = { ...TLS, clientCaFile: path('client-authority') };

/** A worker's link as `site`, with the certificate of this name. */
async function link(address: string, site: string, certificate: string | null) {
  return connectLink({
    url: `${address.replace('https', 'wss')}/v1/site`,
    token: await siteToken(site),
    ca: pem('loopback-cert'),
    ...(certificate === null ? {} : { pair: pairOf(certificate) }),
  });
}

async function analystCall(address: string, certificate: string | null): Promise<Response> {
  const trust: Trust = {
    ca: pem('loopback-cert'),
    pair: certificate === null ? null : pairOf(certificate),
  };
  const headers = { authorization: `Bearer ${await analystToken()}` };
  return requestTo(trust)(`${address}/v1/runs`, { method: 'GET', headers });
}

describe('a worker', () => {
  test.each([
    ['harrowmere', 'harrowmere', 'by its common name'],
    ['castlefen', 'castlefen', 'by one of its alternative names'],
    ['lindell-bay', 'castlefen', 'by the other'],
  ])('%s is let in with the certificate %s: %s', async (site, certificate) => {
    const linked = await link(await start(ASKING), site, certificate);
    if (!linked.ok) throw new Error(linked.failure.message);
    const welcomed = new Promise((resolve) => linked.value.onMessage(({ kind }) => resolve(kind)));
    linked.value.send(helloOf(site));
    expect(await welcomed).toBe('welcome');
    linked.value.close(CLOSE_CODES.normal, '');
  });

  test.each([
    ['harrowmere', null, 'there is none'],
    ['harrowmere', 'expired', 'it has expired'],
    ['harrowmere', 'future', 'it is not valid yet'],
    ['harrowmere', 'stranger', 'it was signed by an authority that is not trusted here'],
    ['castlefen', 'harrowmere', 'it does not name castlefen'],
    ['harrowmere', 'castlefen', 'it does not name harrowmere'],
  ])('%s with the certificate %s is refused: %s', async (site, certificate, reason) => {
    const refused = await link(await start(ASKING), site, certificate);
    expect(refused).toMatchObject({
      ok: false,
      failure: {
        code: 'certificate-refused',
        message: expect.stringContaining(`The client certificate is refused: ${reason}`),
      },
    });
  });

  test('a good certificate is no token', async () => {
    const address = await start(ASKING);
    const refused = await connectLink({
      url: `${address.replace('https', 'wss')}/v1/site`,
      token: 'wrong',
      ca: pem('loopback-cert'),
      pair: pairOf('harrowmere'),
    });
    expect(refused).toMatchObject({ failure: { code: 'token-refused' } });
  });
});

describe('an analyst', () => {
  test('is let in with a certificate of that name only', async () => {
    const address = await start(ASKING);
    expect((await analystCall(address, 'analyst')).status).toBe(200);
    for (const certificate of [null, 'expired', 'stranger', 'harrowmere']) {
      const refused = await analystCall(address, certificate);
      expect(refused.status).toBe(403);
      expect(await refused.json()).toMatchObject({ status: 403, code: 'certificate-refused' });
    }
  });

  test('health needs none: it tells whether the process lives', async () => {
    const address = await start(ASKING);
    const ask = requestTo({ ca: pem('loopback-cert'), pair: null });
    expect((await ask(`${address}/health/live`, { method: 'GET', headers: {} })).status).toBe(200);
  });
});

test('where no certificates are asked for, one that is shown does not matter', async () => {
  const address = await start(TLS);
  expect((await analystCall(address, 'stranger')).status).toBe(200);
});

test.each([
  ['a missing file', { ...ASKING, clientCaFile: '/nowhere/authority.pem' }, 'file-unreadable'],
  ['a file that is no certificate', { ...ASKING, clientCaFile: path('loopback-key') }, 'field-value'],
  ['a key that is not the certificate’s', { ...TLS, keyFile: path('expired-key') }, 'field-conflict'],
  ['no TLS of its own', { clientCaFile: path('client-authority') }, 'field-conflict'],
])('a coordinator does not start with %s', async (_, options, code) => {
  const refused = await startService({ state: bench.state, port: 0, logLevel: 'silent', ...options });
  expect(refused).toMatchObject({ ok: false, failure: { code } });
});

describe('from end to end', () => {
  const SITES = ['harrowmere', 'castlefen'];
  let stage: Stage;
  const as = (name: string) => [
    ...['--certificate-file', path(`client-${name}-cert`), '--key-file', path(`client-${name}-key`)],
    ...['--ca-file', path('loopback-cert')],
  ];

  const siteFile = (site: string, more: string): string =>
    siteFileOf(stage, site, `{csv: ./${site}.csv}`).replace(
      `${site}.token}`,
      `${site}.token, ca-file: ${path('loopback-cert')}${more}}`,
    );
  const showing = (certificate: string, key = certificate): string =>
    `, certificate-file: ${path(`client-${certificate}-cert`)}, key-file: ${path(`client-${key}-key`)}`;

  beforeAll(async () => {
    stage = await Stage.open('client-certificates');
    const serve = ['serve', '--listen', '127.0.0.1:0', '--state', 'state', '--tls-cert', TLS.certFile];
    const { commonfit } = (await import('../support/programs.js')).programs;
    const program = stage.start(
      commonfit,
      ...serve,
      ...['--tls-key', TLS.keyFile, '--client-ca-file', path('client-authority')],
    );
    stage.address = /coordinator is at (\S+),/.exec(await program.says(/coordinator is at \S+,/))?.[1] ?? '';
    for (const site of SITES) {
      await stage.write(`${site}.csv`, smallTable(site, 60));
      await stage.write(`${site}.site.yaml`, siteFile(site, showing(site)));
      await stage.admit(site);
    }
    await stage.write(
      'quick.fit.yaml',
      'commonfit: 1\ntitle: Breaks by age\nsites: [harrowmere, castlefen]\nresponse: {column: breaks}\n' +
        'loss: squared\nterms: [{column: age_years, unit: year}]\n',
    );
  }, PATIENT.timeout);
  afterAll(() => stage?.close());

  test('a run is solved by workers and an analyst with certificates', { ...PATIENT }, async () => {
    for (const site of SITES) stage.join(site);
    const submitted = await stage.analyst('submit', 'quick.fit.yaml', '--watch', ...as('analyst'));
    expect(submitted).toMatchObject({ code: 0, stderr: '' });
    expect(submitted.stdout).toContain('Solved.');
  });

  test('a worker without one, or with one past its time, leaves with 6 and the reason', async () => {
    for (const [more, reason] of [
      ['', 'there is none'],
      [showing('expired'), 'it has expired'],
    ] as const) {
      await stage.write('bare.site.yaml', siteFile('harrowmere', more));
      const { code, stderr } = await stage.worker('join', 'bare.site.yaml');
      expect(code).toBe(6);
      expect(plain(stderr)).toContain(`The client certificate is refused: ${reason}`);
      expect(plain(stderr)).toContain('[certificate-refused]');
    }
  });

  test('a worker whose key is another’s, or missing, or not there leaves with 3', async () => {
    for (const [more, code] of [
      [showing('harrowmere', 'castlefen'), 'field-conflict'],
      [`, certificate-file: ${path('client-harrowmere-cert')}`, 'field-conflict'],
      [', certificate-file: ./none.pem, key-file: ./none.pem', 'file-unreadable'],
      [`, certificate-file: ${TLS.keyFile}, key-file: ${TLS.keyFile}`, 'field-value'],
    ] as const) {
      await stage.write('wrong.site.yaml', siteFile('harrowmere', more));
      const ended = await stage.worker('join', 'wrong.site.yaml');
      expect(ended.code).toBe(3);
      expect(ended.stderr).toContain(`[${code}]`);
    }
  });

  test('an analyst without one is refused with 5; options that do not go together, with 2', async () => {
    const bare = await stage.analyst('runs', '--ca-file', path('loopback-cert'));
    expect(bare.code).toBe(5);
    expect(bare.stderr).toContain('[certificate-refused]');
    const half = await stage.analyst('runs', '--certificate-file', path('client-analyst-cert'));
    expect(half.code).toBe(2);
  });
});
