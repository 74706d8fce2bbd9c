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

const work: fc.Arbitrary<Work> = fc.oneof(
  fc.constant({ work: 'survey' as const }),
  fc.constant({ work: 'factor' as const }),
  fc.record({
    work: fc.constant('proximal' as const),
    problems: some(
      fc.record({
        problem: count,
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
);

const surveyAnswer = fc.record({
  work: fc.constant('survey' as const),
  rowsUsed: count,
  rowsDropped: count,
  columns: fc.array(text, { maxLength: 5 }),
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
  fc.record({ work: fc.constant('factor' as const), factor: vector }),
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
