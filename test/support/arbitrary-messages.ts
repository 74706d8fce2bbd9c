/** Arbitrary messages of every kind, for property tests. Dimensions are free: the schemas know none. */
import fc from 'fast-check';
import { FAILURE_CODES } from '../../protocol/failure.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { Allowance } from '../../protocol/messages/survey.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';

const number = fc.double({ noNaN: true, noDefaultInfinity: true });
const vector = fc.float64Array({ noNaN: true, noDefaultInfinity: true, maxLength: 12 });
const orNull = <T>(arbitrary: fc.Arbitrary<T>): fc.Arbitrary<T | null> => fc.option(arbitrary, { nil: null });
const positive = fc.double({ min: Number.MIN_VALUE, noNaN: true, noDefaultInfinity: true });
const count = fc.nat();
const askNumber = fc.integer({ min: 1, max: Number.MAX_SAFE_INTEGER });
const text = fc.string({ unit: 'binary', maxLength: 40 });
const name = fc.string({ minLength: 1, maxLength: 64 });
const some = <T>(arbitrary: fc.Arbitrary<T>): fc.Arbitrary<T[]> =>
  fc.array(arbitrary, { minLength: 1, maxLength: 4 });

const leave = fc.subarray<Allowance['leave'][number]>(['counts', 'moments', 'proximal', 'sketches']);
const want = fc.constantFrom(
  'value' as const,
  'gradient' as const,
  'diagonal' as const,
  'curvature' as const,
);

const label = fc.string({ minLength: 1, maxLength: 30 });
const part = orNull(
  fc.record({ fold: label, side: fc.constantFrom('training' as const, 'held-out' as const) }),
);
const setting = fc.oneof(
  fc.record({ set: fc.constant('level' as const), column: text, level: text }),
  fc.record({ set: fc.constant('slope' as const), column: text }),
);

const work: fc.Arbitrary<Work> = fc.oneof(
  fc.constant({ work: 'survey' as const }),
  fc.record({ work: fc.constant('factor' as const), folds: fc.array(label, { maxLength: 3 }) }),
  fc.record({
    work: fc.constant('proximal' as const),
    problems: some(
      fc.record({
        problem: count,
        part,
        center: vector,
        scale: positive,
        diagonal: orNull(vector),
        diagonalAsk: count,
        start: orNull(vector),
        startAsk: count,
      }),
    ),
  }),
  fc.record({
    work: fc.constant('evaluate' as const),
    problem: count,
    part,
    points: some(fc.record({ point: vector, want })),
    ownFit: orNull(fc.record({ at: count, hold: positive })),
    sketch: orNull(fc.record({ at: count, directions: vector, columns: askNumber })),
  }),
  fc.record({
    work: fc.constant('joint' as const),
    problem: count,
    start: vector,
    curvature: vector,
    linear: vector,
    l1: vector,
    l2: vector,
  }),
  fc.record({
    work: fc.constant('scores' as const),
    problem: count,
    point: vector,
    meat: fc.boolean(),
    clustered: fc.boolean(),
  }),
  fc.record({ work: fc.constant('site-fit' as const), problem: count, start: vector }),
  fc.record({
    work: fc.constant('margins' as const),
    problem: count,
    point: vector,
    settings: some(setting),
  }),
  fc.record({
    work: fc.constant('quality' as const),
    problem: count,
    point: vector,
    edges: vector,
    inverse: orNull(vector),
    leverageHigh: number,
  }),
);

const moments = {
  rowsUsed: count,
  mean: vector,
  centredSquares: vector,
  response: fc.record({
    weightSum: number,
    weightedSum: number,
    exposureSum: number,
    least: number,
    most: number,
    saturatedLoss: number,
  }),
};

const surveyAnswer = fc.record({
  work: fc.constant('survey' as const),
  ...moments,
  rowsDropped: count,
  columns: fc.array(text, { maxLength: 5 }),
  folds: fc.array(fc.record({ fold: label, ...moments }), { maxLength: 3 }),
  allowance: fc.record({
    leave,
    curvatureMost: orNull(count),
    numbersMost: orNull(count),
    roundsMost: orNull(count),
  }),
  notes: fc.array(text, { maxLength: 3 }),
});

const quadratic = fc.record({ value: number, gradient: vector, curvature: vector });

const workAnswer: fc.Arbitrary<WorkAnswer> = fc.oneof(
  surveyAnswer,
  fc.record({ work: fc.constant('factor' as const), factors: some(vector) }),
  fc.record({
    work: fc.constant('proximal' as const),
    problems: some(fc.record({ problem: count, point: vector, newtonSteps: count })),
  }),
  fc.record({
    work: fc.constant('evaluate' as const),
    problem: count,
    points: some(
      fc.record({
        value: number,
        gradient: orNull(vector),
        diagonal: orNull(vector),
        curvature: orNull(vector),
      }),
    ),
    ownFit: orNull(fc.record({ curvature: vector, linear: vector })),
    sketch: orNull(vector),
  }),
  fc.record({
    work: fc.constant('joint' as const),
    problem: count,
    start: quadratic,
    point: vector,
    end: quadratic,
    newtonSteps: count,
  }),
  fc.record({
    work: fc.constant('scores' as const),
    problem: count,
    gradient: vector,
    meat: orNull(vector),
    clustered: orNull(vector),
    clusterCount: count,
    pearson: number,
  }),
  fc.record({
    work: fc.constant('site-fit' as const),
    problem: count,
    fit: orNull(
      fc.record({
        point: vector,
        value: number,
        curvature: vector,
        undetermined: fc.array(count, { maxLength: 3 }),
        pearson: number,
      }),
    ),
    reason: orNull(text),
  }),
  fc.record({
    work: fc.constant('margins' as const),
    problem: count,
    rows: count,
    settings: some(fc.record({ sum: number, gradient: vector })),
  }),
  fc.record({
    work: fc.constant('quality' as const),
    problem: count,
    rows: count,
    binRows: vector,
    binPredicted: vector,
    binObserved: vector,
    rowsSuppressed: count,
    pearsonSum: number,
    pearsonSquares: number,
    leverage: orNull(fc.record({ sum: number, most: number, rowsHigh: count })),
    zeros: orNull(fc.record({ observed: count, expected: number })),
  }),
);

export const arbitraryToWorker: fc.Arbitrary<ToWorker> = fc.oneof(
  fc.record({
    kind: fc.constant('welcome' as const),
    version: fc.constant(1 as const),
    software: text,
    frameBytesMost: count,
  }),
  fc.record({
    kind: fc.constant('prepare' as const),
    run: name,
    specification: text,
    digest: fc.stringMatching(/^[0-9a-f]{64}$/),
    scaling: orNull(
      fc.record({ rowCountTotal: askNumber, kept: fc.array(count), center: vector, scale: vector }),
    ),
  }),
  fc.record({ kind: fc.constant('ask' as const), run: name, ask: askNumber, work: some(work) }),
  fc.record({ kind: fc.constant('run-end' as const), run: name, outcome: text }),
);

export const arbitraryToCoordinator: fc.Arbitrary<ToCoordinator> = fc.oneof(
  fc.record({
    kind: fc.constant('hello' as const),
    version: fc.constant(1 as const),
    site: name,
    shard: fc.record({ index: askNumber, of: askNumber }),
    software: text,
    kernel: text,
  }),
  fc.record({ kind: fc.constant('answer' as const), run: name, ask: askNumber, work: some(workAnswer) }),
  fc.record({
    kind: fc.constant('refusal' as const),
    run: name,
    ask: askNumber,
    code: fc.constantFrom(...FAILURE_CODES),
    message: text,
    remedy: orNull(text),
  }),
);
