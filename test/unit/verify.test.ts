import { createHash } from 'node:crypto';
import { mkdir, mkdtemp, readFile, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import { decodeReply, encodeReply, type JournalRecord } from '../../coordinator/journal/records.js';
import { isRefusal } from '../../coordinator/panel/panel-state.js';
import { type Verification, verifies, verifyText } from '../../coordinator/report/verify-text.js';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { verifyFolder } from '../../coordinator/service/verify-folder.js';
import { type SitesInProcess, sitesInProcess } from '../support/in-process-fit.js';
import { SMALL_SITES, smallTable } from '../support/small-scenario.js';
import { storedRun, writeJournal } from '../support/stored-run.js';

const TERMS =
  'terms: [{column: age_years}, {column: material, levels: [pvc, ductile-iron, cast-iron, steel], baseline: pvc}, {column: pressure_bar}]';
const fitOf = (...lines: readonly string[]): string =>
  [
    'commonfit: 1',
    'title: Breaks by age and pressure',
    `sites: [${SMALL_SITES.join(', ')}]`,
    'response: {column: breaks}',
    TERMS,
    ...lines,
    '',
  ].join('\n');
const POISSON = ['loss: poisson', 'exposure: {column: km_years}'];

let base = '';
let table = '';
let folders = 0;

beforeAll(async () => {
  base = await mkdtemp(join(tmpdir(), 'commonfit-verify-'));
  table = join(base, 'all.csv');
  const parts = [...SMALL_SITES, 'oakhythe'].map((site) => {
    const [head, ...lines] = smallTable(site, 150).trimEnd().split('\n');
    return { head: `${head},site`, lines: lines.map((line) => `${line},${site}`) };
  });
  await writeFile(table, [parts[0].head, ...parts.flatMap(({ lines }) => lines), ''].join('\n'));
});
afterAll(() => rm(base, { recursive: true, force: true }));

async function newFolder(): Promise<string> {
  folders += 1;
  const folder = join(base, `run-${folders}`);
  await mkdir(folder);
  return folder;
}

async function verified(folder: string): Promise<Verification & { words: string }> {
  const found = await verifyFolder(folder);
  if (!found.ok) throw new Error(found.failures[0].message);
  const here = { software: found.value.replayed.software ?? '', node: found.value.replayed.node ?? '' };
  return { ...found.value, words: verifyText(found.value, here, 10_000).join('\n') };
}

describe('an honest run verifies', () => {
  test.each([
    ['curvature', fitOf(...POISSON), null, 'recomputed', 'step', 'measured'],
    [
      'curvature',
      fitOf(...POISSON, 'penalty: [{kind: lasso, lambda: [0.1, 0.02]}]'),
      null,
      'recomputed',
      'step',
      'measured',
    ],
    ['proximal', fitOf(...POISSON), 3, 'recomputed', 'step', 'measured'],
    [
      'proximal',
      fitOf(...POISSON, 'penalty: [{kind: ridge, lambda: 0.1}]'),
      0,
      'recomputed',
      'point',
      'estimate',
    ],
    ['sketched', fitOf(...POISSON, 'rounds: {rung: sketched}'), null, 'part', 'point', 'sketched'],
    [
      'pooled',
      fitOf('loss: squared', 'penalty: [{kind: lasso, lambda: 0.01}]'),
      null,
      'recomputed',
      'function',
      'measured',
    ],
    [
      'curvature',
      fitOf('loss: squared', 'rounds: {rung: curvature}'),
      null,
      'recomputed',
      'function',
      'measured',
    ],
    ['proximal', fitOf('loss: squared', 'rounds: {rung: proximal}'), 3, 'recomputed', 'function', 'measured'],
    [
      'curvature',
      fitOf(
        ...POISSON,
        'penalty: [{kind: lasso, lambda: {count: 6, ratio: 0.01}}]',
        'choose: {folds: 3, seed: 1}',
        'report: [covariance]',
      ),
      null,
      'recomputed',
      'step',
      'measured',
    ],
    ['curvature', fitOf(...POISSON, 'intercept: per-site'), null, 'recomputed', 'step', 'measured'],
  ] as const)('on the rung %s, %#', async (rung, text, curvatureMost, extent, at, kind) => {
    const folder = await newFolder();
    const { result } = await storedRun(text, await sitesInProcess(text, table, curvatureMost), folder);
    expect([result.outcome, result.rung]).toEqual(['solved', rung]);
    const found = await verified(folder);
    expect(found.fits.map(({ differences }) => differences)).toEqual(result.fits.map(() => []));
    expect(verifies(found)).toBe(true);
    expect(found.fits.map((fit) => [fit.extent, fit.at, fit.kind])).toEqual(
      result.fits.map(() => [extent, at, kind]),
    );
    expect(found.fits.map(({ relativeGap }) => relativeGap)).toEqual(
      result.fits.map(({ certificate }) => certificate?.relativeGap),
    );
  });
});

const RIDGE = fitOf(...POISSON, 'penalty: [{kind: ridge, lambda: 0.05}]');

test('a run in which a site was late, and one that starts from another, verify', async () => {
  // with fewer than four sites every one is waited for
  const quorum = fitOf(...POISSON, 'barrier: {deadline: 1s, quorum: 3, oldest: 40}').replace(
    'castlefen]',
    'castlefen, oakhythe]',
  );
  const late = await newFolder();
  const { records } = await storedRun(quorum, await sitesInProcess(quorum, table, null), late, { late: 2 });
  expect(records.some((one) => one.record === 'answered' && one.replies.includes(null))).toBe(true);
  const found = await verified(late);
  expect([verifies(found), found.fits[0].extent, found.fits[0].at]).toEqual([true, 'recomputed', 'step']);

  const startFrom = {
    run: 'r0',
    coefficients: [
      ['(intercept)', -2],
      ['age_years', 0.02],
    ] as const,
    redefined: [],
  };
  const again = await newFolder();
  const { result } = await storedRun(RIDGE, await sitesInProcess(RIDGE, table, null), again, { startFrom });
  expect(result.startedFrom?.used).toBe(true);
  expect(verifies(await verified(again))).toBe(true);
});

test('a fit that did not end solved has no certificate to recompute, and the words say so', async () => {
  const text = fitOf(...POISSON, 'rounds: {most: 2, rung: proximal}');
  const folder = await newFolder();
  const { result } = await storedRun(text, await sitesInProcess(text, table, 0), folder);
  expect(result.outcome).toBe('round-limit');
  const found = await verified(folder);
  expect(verifies(found)).toBe(true);
  expect(found.words).toContain('The gap of the fit is about');
});

describe('what was changed is told', () => {
  let sites: SitesInProcess;
  let folder: string;
  let records: JournalRecord[];
  let result: ResultDocument;

  beforeAll(async () => {
    sites = await sitesInProcess(RIDGE, table, null);
    folder = await newFolder();
    ({ records, result } = await storedRun(RIDGE, sites, folder));
  });

  async function changedResult(change: (document: ReturnType<typeof JSON.parse>) => void) {
    const copy = await newFolder();
    await storedRun(RIDGE, sites, copy);
    const document = JSON.parse(await readFile(join(copy, 'result.json'), 'utf8'));
    change(document);
    await writeFile(join(copy, 'result.json'), `${JSON.stringify(document, null, 2)}\n`);
    return verified(copy);
  }

  test('the words name the gap, the sites and the ask; digests, software, kernels and Node follow', async () => {
    const { words, audit } = await verified(folder);
    const asks = records.filter(({ record }) => record === 'answered').length;
    expect(words).toContain(
      `The gap of the fit at λ = 0.05 is at most ${Number(result.fits[0].certificate?.relativeGap.toPrecision(2))} of the objective (measured): recomputed from the answers of 3 sites to ask ${asks}.`,
    );
    expect(words).toContain('one model step beyond the point whose gap is certified');
    const journal = await readFile(join(folder, 'journal'));
    expect(audit.journal).toBe(createHash('sha256').update(journal).digest('hex'));
    for (const part of [audit.journal, audit.specification, `Node ${process.version}`, 'kernels here'])
      expect(words).toContain(part);
  });

  test.each([[1.5], [1e12]])('a coefficient in result.json (%s)', async (value) => {
    const found = await changedResult((document) => {
      document.fits[0].coefficients.age_years = value;
    });
    expect(verifies(found)).toBe(false);
    expect(found.words).toContain('Not verified');
    expect(found.words).toContain(
      `In result.json, the fit at λ = 0.05: coefficients.age_years is ${JSON.stringify(value)}; recomputed from the answers, it is ${result.fits[0].coefficients.age_years}.`,
    );
  });

  test('the certificate in result.json', async () => {
    const found = await changedResult((document) => {
      document.fits[0].certificate.relativeGap /= 2;
    });
    expect(verifies(found)).toBe(false);
    expect(found.fits[0].differences).toEqual([
      expect.stringMatching(/^certificate\.relativeGap is \S+; recomputed from the answers, it is \S+$/),
    ]);
  });

  test.each([['the last'], ['an earlier']])(
    'a gradient in %s ask of the journal, its checks made to fit',
    async (which) => {
      const answered = records.filter((one) => one.record === 'answered');
      const at = which === 'the last' ? answered.length - 1 : 1;
      const own = answered[at];
      const reply = decodeReply('r1', own.ask, own.replies[1] as Uint8Array);
      if (!reply.ok || isRefusal(reply.value) || reply.value[0].work !== 'evaluate')
        throw new Error('another answer');
      const gradient = reply.value[0].points[0].gradient as Float64Array;
      gradient[1] += 1e-6;
      const replies = [...own.replies];
      replies[1] = encodeReply('r1', own.ask, reply.value);
      const copy = await newFolder();
      await storedRun(RIDGE, sites, copy);
      await writeJournal(
        copy,
        records.map((record) => (record === own ? { ...own, replies } : record)),
      );
      const found = await verified(copy);
      expect(verifies(found)).toBe(false);
      expect(found.fits[0].differences.length).toBeGreaterThan(0);
      expect(found.words).toContain(
        which === 'the last'
          ? 'recomputed from the answers, it is'
          : `What the fit at λ = 0.05 rests on cannot be told: the journal fits the run for its first ${own.ask} asks only.`,
      );
    },
  );
});
