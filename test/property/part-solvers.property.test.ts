import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { seededRandom } from '../../numerics/random.js';
import type { Part } from '../../protocol/messages/part.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { LossForm } from '../../protocol/specification/types.js';
import { denseShard, RawDenseRows } from '../../worker/design/dense-rows.js';
import { scaleParts } from '../../worker/design/scale.js';
import type { RawShard, Shard } from '../../worker/design/shard.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { partSolvers } from '../../worker/local/part-solvers.js';
import { lossOf } from '../../worker/losses/index.js';
import { entriesOf } from '../support/dense.js';
import { soundValue } from '../support/tables.js';

const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 0.7 },
];
const LABELS = ['a', 'b', 'c', 'd'];

interface Case {
  readonly seed: number;
  readonly sizes: readonly number[];
  readonly columns: number;
  readonly loss: LossForm;
  readonly weighted: boolean;
}

const cases: fc.Arbitrary<Case> = fc.record({
  seed: fc.integer({ min: 1, max: 1e9 }),
  sizes: fc.array(fc.integer({ min: 1, max: 12 }), { minLength: 1, maxLength: 4 }),
  columns: fc.integer({ min: 1, max: 5 }),
  loss: fc.constantFrom(...LOSSES),
  weighted: fc.boolean(),
});

function sceneOf({ seed, sizes, columns, loss, weighted }: Case) {
  const random = seededRandom(seed);
  const starts = [0];
  for (const size of sizes) starts.push(starts[starts.length - 1] + size);
  const rowCount = starts[sizes.length];
  const numbers = (count: number) => Float64Array.from({ length: count }, () => random.normal());
  const raw: RawShard = {
    rowCount,
    rowsDropped: 0,
    columns: Array.from({ length: columns }, (_, j) => `x${j}`),
    rows: new RawDenseRows(numbers(rowCount * columns), columns, rowCount),
    y: Float64Array.from({ length: rowCount }, () =>
      loss.kind === 'logistic' || loss.kind === 'poisson' ? random.integer(2) : random.normal(),
    ),
    weights: weighted ? Float64Array.from({ length: rowCount }, () => random.uniform()) : null,
    offset: weighted ? numbers(rowCount) : null,
    folds: { labels: LABELS.slice(0, sizes.length), starts },
    clusters: null,
    margins: null,
  };
  const scaling: Scaling = {
    rowCountTotal: 3 * rowCount,
    kept: Array.from({ length: columns }, (_, j) => j),
    center: numbers(columns),
    scale: numbers(columns).map((value) => 0.5 + Math.abs(value)),
  };
  return { raw, scaling, random, numbers };
}

/** The naive twin: the rows of a part picked one by one. */
function picked(shard: Shard, raw: RawShard, part: Part): Shard {
  const { labels, starts } = raw.folds ?? { labels: [], starts: [] };
  const rows = Array.from({ length: raw.rowCount }, (_, r) => r).filter((r) => {
    const k = starts.findIndex((start, at) => r >= start && r < (starts[at + 1] ?? 0));
    return part === null || (labels[k] === part.fold) === (part.side === 'held-out');
  });
  const of = (values: Float64Array | null) =>
    values === null ? null : Float64Array.from(rows, (r) => values[r]);
  return denseShard({
    ...shard,
    rowCount: rows.length,
    x: Float64Array.from(rows.flatMap((r) => [...entriesOf(shard).subarray(r * shard.p, (r + 1) * shard.p)])),
    y: of(shard.y) ?? new Float64Array(0),
    weights: of(shard.weights),
    offset: of(shard.offset),
  });
}

const close = (a: Float64Array, b: Float64Array, tolerance: number): void => {
  expect(a.length).toBe(b.length);
  for (let j = 0; j < a.length; j++)
    expect(Math.abs(a[j] - b[j])).toBeLessThanOrEqual(tolerance * (1 + Math.abs(b[j])));
};

describe('the solvers of a part', () => {
  test('answer as one built of its rows alone', () => {
    fc.assert(
      fc.property(cases, fc.constantFrom<'training' | 'held-out'>('training', 'held-out'), (one, side) => {
        const { raw, scaling, numbers } = sceneOf(one);
        const shards = scaleParts(raw, scaling, true);
        const loss = lossOf(one.loss);
        const parts = partSolvers(shards, loss, false);
        for (const part of [null, ...LABELS.map((fold): Part => ({ fold, side }))]) {
          const naive = localSolver(picked(shards(null), raw, part), loss);
          const solver = parts.solver(part);
          expect(parts.solver(part)).toBe(solver);
          const p = one.columns + 1;
          const point = numbers(p);
          const mine = soundValue(solver.evaluate(point, 'curvature'));
          const theirs = soundValue(naive.evaluate(point, 'curvature'));
          expect(mine.value).toBeCloseTo(theirs.value, 12);
          close(mine.gradient ?? point, theirs.gradient ?? point, 1e-12);
          close(mine.curvature ?? point, theirs.curvature ?? point, 1e-12);
          const metric = numbers(p).map((value) => 0.1 + Math.abs(value));
          close(
            soundValue(solver.proximal(point, 1, metric, point)).point,
            soundValue(naive.proximal(point, 1, metric, point)).point,
            1e-7,
          );
        }
      }),
      { numRuns: 60 },
    );
  });

  test('a part without rows answers zeros, and its proximal point is the centre', () => {
    const { raw, scaling, numbers } = sceneOf({
      seed: 3,
      sizes: [4],
      columns: 3,
      loss: { kind: 'poisson' },
      weighted: false,
    });
    for (const kind of ['squared', 'logistic', 'poisson'] as const) {
      const parts = partSolvers(scaleParts(raw, scaling, true), lossOf({ kind }), false);
      const nothing: Part[] = [
        { fold: 'elsewhere', side: 'held-out' },
        { fold: 'a', side: 'training' },
      ];
      for (const part of nothing) {
        const solver = parts.solver(part);
        const point = numbers(4);
        const zeros = (length: number) => new Float64Array(length);
        expect(soundValue(solver.evaluate(point, 'curvature'))).toEqual({
          value: 0,
          gradient: zeros(4),
          diagonal: zeros(4),
          curvature: zeros(10),
        });
        expect(soundValue(solver.ownFit(point, 1))).toEqual({ curvature: zeros(10), linear: zeros(4) });
        expect(soundValue(solver.proximal(point, 2, Float64Array.of(1, 2, 3, 4), zeros(4))).point).toEqual(
          point,
        );
        expect(soundValue(solver.factor())).toEqual(zeros(15));
      }
    }
  });

  test('factors by fold stand in the order asked, zeros for a fold that is not here', () => {
    fc.assert(
      fc.property(cases, (one) => {
        const { raw, scaling } = sceneOf({ ...one, loss: { kind: 'squared' } });
        const shards = scaleParts(raw, scaling, true);
        const parts = partSolvers(shards, lossOf({ kind: 'squared' }), false);
        const asked = ['d', 'b', 'a'];
        const factors = soundValue(parts.factors(asked));
        asked.forEach((fold, k) => {
          const rows = picked(shards(null), raw, { fold, side: 'held-out' });
          close(factors[k], soundValue(localSolver(rows, lossOf({ kind: 'squared' })).factor()), 1e-12);
        });
        expect(soundValue(parts.factors([]))).toHaveLength(1);
      }),
      { numRuns: 40 },
    );
  });
});
