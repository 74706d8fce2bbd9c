import { availableParallelism } from 'node:os';
import { afterAll, beforeAll, expect, test } from 'vitest';
import type { ResultDocument } from '../../coordinator/run/result.js';
import { seededRandom } from '../../numerics/random.js';
import { programs } from '../support/programs.js';
import { siteFileOf } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

/** A fit by workers of one thread and of two, of tables large enough for both to work. */
const SITES = ['harrowmere', 'castlefen'] as const;
const ROWS = 15_000;
const COLUMNS = Array.from({ length: 24 }, (_, j) => `reading_${j + 1}`);
let stage: Stage;

beforeAll(async () => {
  stage = await Stage.open('threads');
  await stage.serve();
  for (const [index, site] of SITES.entries()) {
    await stage.write(`${site}.csv`, readings(31 + index));
    await stage.write(`${site}.site.yaml`, siteFileOf(stage, site, `{csv: ./${site}.csv}`));
    await stage.admit(site);
  }
  const terms = COLUMNS.map((column) => `{column: ${column}}`).join(', ');
  const fit = [
    'commonfit: 1',
    'title: Failures by readings',
    `sites: [${SITES.join(', ')}]`,
    'loss: logistic',
    'response: {column: failed, positive: yes}',
    `terms: [${terms}]`,
    'penalty:',
    '  - {kind: elastic-net, lambda: [0.03, 0.003], l1: 0.5}',
    '',
  ];
  await stage.write('failures.fit.yaml', fit.join('\n'));
}, PATIENT.timeout);
afterAll(() => stage?.close());

function readings(seed: number): string {
  const random = seededRandom(seed);
  const lines = [`${COLUMNS.join(',')},failed`];
  for (let row = 0; row < ROWS; row++) {
    const x = COLUMNS.map(() => random.normal());
    const failed = random.uniform() < 1 / (1 + Math.exp(x[1] - x[0])) ? 'yes' : 'no';
    lines.push([...x.map((value) => value.toFixed(3)), failed].join(','));
  }
  return `${lines.join('\n')}\n`;
}

async function fitted(threads: number): Promise<ResultDocument> {
  const workers = SITES.map((site) =>
    stage.start(programs.worker, 'join', `${site}.site.yaml`, '--json', '--threads', String(threads)),
  );
  await Promise.all(workers.map((worker) => worker.says('Connected to')));
  const { code, result } = await stage.submit('failures.fit.yaml').outcome();
  expect(code).toBe(0);
  await Promise.all(workers.map((worker) => worker.kill()));
  return JSON.parse(result) as ResultDocument;
}

test.skipIf(availableParallelism() < 2)(
  'two threads at each site give the result of one, and the result says that they were there',
  PATIENT,
  async () => {
    const [one, two] = [await fitted(1), await fitted(2)];
    expect(two.sites.map(({ kernel }) => kernel)).toEqual(
      one.sites.map(({ kernel }) => `${kernel}, 2 threads`),
    );
    const without = (result: ResultDocument) => ({
      ...result,
      sites: result.sites.map((site) => ({ ...site, kernel: '' })),
    });
    expect(without(two)).toEqual(without(one));
  },
);
