/** A worker written in Python from the protocol's documents alone takes the place of one of ours. */
import { type ChildProcess, spawn } from 'node:child_process';
import { fileURLToPath } from 'node:url';
import { afterAll, beforeAll, describe, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { until } from '../support/processes.js';
import { pythonWith, withoutPython } from '../support/python.js';
import { SMALL_SITES, setSmallScenario } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

const PACKAGES = ['websockets', 'cbor2', 'numpy'];
const python = pythonWith(PACKAGES);
const skipped = python === null ? ` (${withoutPython(PACKAGES)})` : '';

const OTHER = 'oakhythe';
const SITES = [...SMALL_SITES, OTHER];
const TOLERANCE = 1e-8;

const TERMS = `terms:
  - {column: age_years, unit: year}
  - {column: diameter_mm, unit: mm, transform: log}
  - {column: material, levels: [pvc, ductile-iron, cast-iron, steel], baseline: pvc}
  - {column: pressure_bar, unit: bar}
  - {column: pressure_bar, unit: bar, transform: {power: 2}}
  - {product: [age_years, material]}`;

const document = (title: string, lines: readonly string[]): string =>
  [`commonfit: 1`, `title: ${title}`, `sites: [${SITES.join(', ')}]`, ...lines, TERMS, ''].join('\n');

const ridge = 'penalty: [{kind: ridge, lambda: 0.01}]';
const elasticNet = 'penalty: [{kind: elastic-net, lambda: 0.01, l1: 0.5}]';
const roundsOf = (rung: string): string => `rounds: {tolerance: ${TOLERANCE}, most: 500, rung: ${rung}}`;
const poisson = ['response: {column: breaks}', 'loss: poisson', 'exposure: {column: km_years}'];
const logistic = ['response: {column: broke, positive: yes}', 'loss: logistic'];
const squared = ['response: {column: pressure_bar}', 'loss: squared'];
const depths = squared.map((line) => line.replace('pressure_bar', 'depth_m'));

/** The fit in which the fourth site is many times slower than the others, and is asked for joint problems. */
const SLOW = 'joint problems for a slow site';
const PAUSE_SECONDS = 0.6;

/** By the work that the worker is asked for. */
const FITS: Readonly<Record<string, string>> = {
  'survey and factor': document('Depth', [...depths, elasticNet, roundsOf('highest')]),
  'evaluate with curvature': document('Breaks', [...poisson, ridge, roundsOf('curvature')]),
  'evaluate, no intercept': document('Broke', [...logistic, ridge, 'intercept: none', roundsOf('curvature')]),
  'evaluate with sketches': document('Breaks, sketched', [...poisson, ridge, roundsOf('sketched')]),
  'three of four sites heard a round': document('Breaks, late', [
    ...poisson,
    elasticNet,
    roundsOf('curvature'),
    'barrier: {deadline: 5s, quorum: 3, oldest: 20}',
  ]),
  [SLOW]: document('Breaks, one site slow', [
    ...poisson,
    elasticNet,
    roundsOf('curvature'),
    'barrier: {deadline: 20s, quorum: 3, oldest: 60}',
  ]),
  'proximal, vectors left out': document('Breaks, proximal', [...poisson, elasticNet, roundsOf('proximal')]),
};

let stage: Stage;
let other: ChildProcess | null = null;
const said: string[] = [];

/** Starts the Python worker and waits until it is connected. */
async function startPython(pauseSeconds: number): Promise<ChildProcess> {
  const url = stage.address.replace(/^http/, 'ws');
  const script = fileURLToPath(new URL('worker.py', import.meta.url));
  const args = ['--url', url, '--site', OTHER, '--token-file', `${OTHER}.token`, '--table', `${OTHER}.csv`];
  args.push('--pause', `${pauseSeconds}`);
  said.push('\n');
  const from = said.length;
  const child = spawn(python ?? '', [script, ...args], {
    cwd: stage.folder,
    stdio: ['ignore', 'pipe', 'pipe'],
  });
  for (const stream of [child.stdout, child.stderr])
    stream?.setEncoding('utf8').on('data', (text: string) => said.push(text));
  await until(
    'the Python worker',
    () => said.slice(from).join('').includes('connected'),
    () => said.join(''),
  );
  return child;
}

async function fitAll(names: readonly string[]): Promise<[string, ResultDocument][]> {
  const results: [string, ResultDocument][] = [];
  for (const name of names) {
    const { result } = await stage.submit(await stage.write('one.fit.yaml', FITS[name])).outcome();
    results.push([name, JSON.parse(result)]);
  }
  return results;
}

let withPython: Map<string, ResultDocument>;
let withOurs: Map<string, ResultDocument>;

describe.skipIf(python === null)(`an independent worker${skipped}`, () => {
  beforeAll(async () => {
    stage = await Stage.open('interop');
    await setSmallScenario(stage, 900, SITES);
    // the rung is the specification's to choose here
    for (const site of SITES)
      await stage.write(
        `${site}.site.yaml`,
        (await stage.read(`${site}.site.yaml`)).replace(
          'curvature-most: 0',
          'curvature-most: any\n  leave: [counts, moments, proximal, gradients, curvature, sketches]',
        ),
      );
    for (const site of SMALL_SITES) stage.join(site);
    const names = Object.keys(FITS);
    other = await startPython(0);
    const prompt = await fitAll(names.filter((name) => name !== SLOW));
    other.kill('SIGKILL');
    other = await startPython(PAUSE_SECONDS);
    withPython = new Map([...prompt, ...(await fitAll([SLOW]))]);
    other.kill('SIGKILL');
    stage.join(OTHER);
    withOurs = new Map(await fitAll(names));
  }, 2 * PATIENT.timeout);
  afterAll(async () => {
    other?.kill('SIGKILL');
    await stage?.close();
  });

  test.each(Object.keys(FITS))('%s: solved, with the result that four workers of ours give', (name) => {
    const [mixed, ours] = [withPython.get(name), withOurs.get(name)];
    expect(mixed).toMatchObject({ outcome: 'solved', rung: ours?.rung, rowsTotal: ours?.rowsTotal });
    const [a, b] = [mixed?.fits[0], ours?.fits[0]];
    expect(a?.certificate?.kind).toBe(b?.certificate?.kind);
    expect(a?.certificate?.relativeGap).toBeLessThanOrEqual(TOLERANCE);
    expect(Object.keys(a?.coefficients ?? {})).toEqual(Object.keys(b?.coefficients ?? {}));
    for (const [column, value] of Object.entries(b?.coefficients ?? {})) {
      const size = Math.max(1e-3, Math.abs(value));
      expect(Math.abs((a?.coefficients[column] ?? Number.NaN) - value) / size, column).toBeLessThan(1e-5);
    }
  });

  test('it was asked for every kind of work that a plain fit has', () => {
    for (const work of ['survey', 'factor', 'evaluate', 'proximal', 'joint'])
      expect(said.join('')).toContain(`answered ${work}`);
  });

  test('the coordinator knows the other worker by the name it gave', () => {
    const site = withPython.get('survey and factor')?.sites.find(({ site: named }) => named === OTHER);
    expect(site?.kernel).toMatch(/^numpy /);
  });
});
