import { expect, test } from 'vitest';
import { seededRandom } from '../../numerics/random.js';
import type { EvaluateWork } from '../../protocol/messages/evaluate.js';
import type { Part } from '../../protocol/messages/part.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import type { RawShard } from '../../worker/design/shard.js';
import { siteSolvers } from '../../worker/local/site-solvers.js';
import { lossOf } from '../../worker/losses/index.js';
import { computeWorks } from '../../worker/service/compute.js';
import { compiledKernels } from '../support/kernels.js';
import { must } from '../support/method-driver.js';

const ROWS = 900;
const WIDTH = 3;
const random = seededRandom(3);
const normals = (count: number): Float64Array => Float64Array.from({ length: count }, () => random.normal());
const RAW: RawShard = {
  rowCount: ROWS,
  rowsDropped: 0,
  columns: ['a', 'b', 'c'],
  rows: new RawDenseRows(normals(ROWS * WIDTH), WIDTH, ROWS),
  y: Float64Array.from({ length: ROWS }, () => random.integer(2)),
  weights: null,
  offset: null,
  folds: { labels: ['1', '2'], starts: [0, 400, ROWS] },
  clusters: null,
  margins: null,
};
const SCALING = {
  rowCountTotal: ROWS,
  kept: [0, 1, 2],
  center: new Float64Array(WIDTH),
  scale: new Float64Array(WIDTH).fill(1),
};
const PARTS: readonly Part[] = [null, null, { fold: '1', side: 'training' }, null, null, null, null];
const WANTS = ['value', 'gradient', 'curvature', 'diagonal'] as const;

const work = (problem: number, part: Part): EvaluateWork => ({
  work: 'evaluate',
  problem,
  part,
  points: WANTS.slice(0, 1 + (problem % 4)).map((want) => ({ point: normals(WIDTH + 1), want })),
  ownFit: null,
  sketch: null,
});

test.each(await compiledKernels())(
  'works of one ask share reads of the rows and change no bit: $name',
  async (kernel) => {
    const loss = { kind: 'logistic' } as const;
    const solvers = siteSolvers({ intercept: 'shared', loss }, RAW, SCALING, kernel);
    const allowance = { kinds: [], curvature: 0 } as never;
    const means = { raw: RAW, loss: lossOf(loss), solvers, allowance };
    const works = PARTS.map((part, problem) => work(problem, part));
    const goOn = async () => 'go-on' as const;
    const together = await computeWorks(works, means, goOn);
    for (const [at, one] of works.entries()) {
      const alone = await computeWorks([one], means, goOn);
      expect(together === null ? null : must(together)[at]).toEqual(
        alone === null ? undefined : must(alone)[0],
      );
    }
  },
);

test('an ask given up between two pieces of a batch is given up', async () => {
  const loss = { kind: 'logistic' } as const;
  const solvers = siteSolvers({ intercept: 'shared', loss }, RAW, SCALING);
  const means = { raw: RAW, loss: lossOf(loss), solvers, allowance: {} as never };
  let turns = 0;
  const stopping = async () => (++turns > 1 ? ('stop' as const) : ('go-on' as const));
  expect(await computeWorks([work(3, null), work(2, null)], means, stopping)).toBeNull();
});
