/** One message of every kind, with every field that may be null once there and once left out. */
import type { Answer, Ask, Refusal } from '../../protocol/messages/round.js';
import type { Prepare, RunEnd } from '../../protocol/messages/run.js';
import type { Hello, Welcome } from '../../protocol/messages/session.js';
import type { ToCoordinator } from '../../protocol/messages/to-coordinator.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';

const vector = (...values: number[]): Float64Array => Float64Array.from(values);

export const hello: Hello = {
  kind: 'hello',
  version: 1,
  site: 'lindell-bay',
  shard: { index: 1, of: 2 },
  software: 'commonfit 0.1.0',
  kernel: 'typescript',
};

export const welcome: Welcome = {
  kind: 'welcome',
  version: 1,
  software: 'commonfit 0.1.0',
  frameBytesMost: 134217728,
};

export const prepare: Prepare = {
  kind: 'prepare',
  run: 'r1',
  specification: '{"title":"Pipe breaks"}',
  digest: '0123456789abcdef'.repeat(4),
  scaling: { rowCountTotal: 1200, kept: [0, 2], center: vector(31.5, 0.25), scale: vector(12, 0.5) },
};

export const runEnd: RunEnd = { kind: 'run-end', run: 'r1', outcome: 'solved' };

/** p = 2. */
export const ask: Ask = {
  kind: 'ask',
  run: 'r1',
  ask: 7,
  work: [
    { work: 'survey' },
    {
      work: 'proximal',
      problems: [
        {
          problem: 0,
          part: null,
          center: vector(1, -0.5),
          scale: 0.25,
          diagonal: vector(1, 2),
          diagonalAsk: 7,
          start: vector(0, 0),
          startAsk: 7,
        },
        {
          problem: 1,
          part: { fold: '2', side: 'training' },
          center: vector(1, -0.5),
          scale: 0.1,
          diagonal: null,
          diagonalAsk: 3,
          start: null,
          startAsk: 6,
        },
      ],
    },
    {
      work: 'evaluate',
      problem: 0,
      part: null,
      points: [
        { point: vector(1, 2), want: 'value' },
        { point: vector(1, 2), want: 'gradient' },
        { point: vector(1, 2), want: 'diagonal' },
        { point: vector(1, 2), want: 'curvature' },
      ],
      ownFit: { at: 3, hold: 0.3 },
      sketch: { at: 2, directions: vector(1, 0, 1, 1), columns: 2 },
    },
    {
      work: 'evaluate',
      problem: 0,
      part: { fold: '2', side: 'held-out' },
      points: [{ point: vector(0, 0), want: 'value' }],
      ownFit: null,
      sketch: null,
    },
    { work: 'factor', folds: ['1', '2'] },
    {
      work: 'joint',
      problem: 2,
      start: vector(1, 2),
      curvature: vector(3, 0.5, 4),
      linear: vector(1, 1),
      l1: vector(0, 0.1),
      l2: vector(0, 0.2),
    },
    { work: 'scores', problem: 3, point: vector(1, 2), meat: true, clustered: true },
    { work: 'scores', problem: 3, point: vector(1, 2), meat: false, clustered: false },
    { work: 'site-fit', problem: 4, start: vector(1, 2) },
    { work: 'site-fit', problem: 5, start: vector(1, 2) },
    {
      work: 'margins',
      problem: 6,
      point: vector(1, 2),
      settings: [
        { set: 'level', column: 'material', level: 'steel' },
        { set: 'slope', column: 'age_years' },
      ],
    },
    {
      work: 'quality',
      problem: 7,
      point: vector(1, 2),
      edges: vector(-1, 0.5),
      inverse: vector(3, 0.5, 4),
      leverageHigh: 0.25,
    },
    {
      work: 'quality',
      problem: 7,
      point: vector(1, 2),
      edges: vector(),
      inverse: null,
      leverageHigh: 0.25,
    },
  ],
};

/** The answer to `ask`. */
export const answer: Answer = {
  kind: 'answer',
  run: 'r1',
  ask: 7,
  work: [
    {
      work: 'survey',
      rowsUsed: 300,
      rowsDropped: 4,
      columns: ['age_years', 'material=steel'],
      mean: vector(30, 0.2),
      centredSquares: vector(4000, 48),
      response: {
        weightSum: 300,
        weightedSum: 120,
        exposureSum: 310.5,
        least: 0,
        most: 9,
        saturatedLoss: -12.75,
      },
      folds: [
        {
          fold: '1',
          rowsUsed: 180,
          mean: vector(31, 0.25),
          centredSquares: vector(2500, 33.75),
          response: {
            weightSum: 180,
            weightedSum: 70,
            exposureSum: 190.5,
            least: 0,
            most: 9,
            saturatedLoss: -8.5,
          },
        },
        {
          fold: '2',
          rowsUsed: 120,
          mean: vector(28.5, 0.125),
          centredSquares: vector(1400, 13.125),
          response: {
            weightSum: 120,
            weightedSum: 50,
            exposureSum: 120,
            least: 0,
            most: 6,
            saturatedLoss: -4.25,
          },
        },
      ],
      allowance: { leave: ['counts', 'moments'], curvatureMost: 3, numbersMost: null, roundsMost: 2000 },
      notes: ['diameter_mm looks like inches'],
    },
    {
      work: 'proximal',
      problems: [
        { problem: 0, point: vector(0.5, 0.1), newtonSteps: 3 },
        { problem: 1, point: vector(0.5, 0.125), newtonSteps: 1 },
      ],
    },
    {
      work: 'evaluate',
      problem: 0,
      points: [
        { value: 1.5, gradient: null, diagonal: null, curvature: null },
        { value: 1.5, gradient: vector(1, 2), diagonal: null, curvature: null },
        { value: 1.5, gradient: vector(1, 2), diagonal: vector(3, 4), curvature: null },
        { value: 1.5, gradient: vector(1, 2), diagonal: vector(3, 4), curvature: vector(3, 0.5, 4) },
      ],
      ownFit: { curvature: vector(3, 0.5, 4), linear: vector(1, 1) },
      sketch: vector(3, 0.5, 3.5, 4.5),
    },
    {
      work: 'evaluate',
      problem: 0,
      points: [{ value: 2, gradient: null, diagonal: null, curvature: null }],
      ownFit: null,
      sketch: null,
    },
    {
      work: 'factor',
      factors: [vector(1, 0.5, 2, 0.25, 0.125, 3), vector(2, 0.5, 1, 0.125, 0.25, 4)],
    },
    {
      work: 'joint',
      problem: 2,
      start: { value: 1.5, gradient: vector(1, 2), curvature: vector(3, 0.5, 4) },
      point: vector(0.5, 0),
      end: { value: 1.25, gradient: vector(0.5, 1), curvature: vector(2, 0.5, 4) },
      newtonSteps: 4,
    },
    {
      work: 'scores',
      problem: 3,
      gradient: vector(1, 2),
      meat: vector(3, 0.5, 4),
      clustered: vector(5, 0.25, 6),
      clusterCount: 12,
      pearson: 290.5,
    },
    {
      work: 'scores',
      problem: 3,
      gradient: vector(1, 2),
      meat: null,
      clustered: null,
      clusterCount: 0,
      pearson: 290.5,
    },
    {
      work: 'site-fit',
      problem: 4,
      fit: {
        point: vector(0.5, 0),
        value: 1.25,
        curvature: vector(3, 0, 0),
        undetermined: [1],
        pearson: 280.5,
      },
      reason: null,
    },
    { work: 'site-fit', problem: 5, fit: null, reason: 'The responses are all 0.' },
    {
      work: 'margins',
      problem: 6,
      rows: 300,
      settings: [
        { sum: 120.5, gradient: vector(100, 20) },
        { sum: 0.5, gradient: vector(1, 2) },
      ],
    },
    {
      work: 'quality',
      problem: 7,
      rows: 300,
      binRows: vector(100, 0, 190),
      binPredicted: vector(10.5, 0, 90.25),
      binObserved: vector(11, 0, 95),
      rowsSuppressed: 10,
      pearsonSum: 1.5,
      pearsonSquares: 290.5,
      leverage: { sum: 0.75, most: 0.125, rowsHigh: 2 },
      zeros: { observed: 200, expected: 195.5 },
    },
    {
      work: 'quality',
      problem: 7,
      rows: 300,
      binRows: vector(300),
      binPredicted: vector(120.5),
      binObserved: vector(120),
      rowsSuppressed: 0,
      pearsonSum: 1.5,
      pearsonSquares: 290.5,
      leverage: null,
      zeros: null,
    },
  ],
};

export const refusal: Refusal = {
  kind: 'refusal',
  run: 'r1',
  ask: 7,
  code: 'policy-curvature',
  message: 'The policy of this site lets no curvature matrix leave.',
  remedy: null,
};

export const toWorkerMessages: readonly ToWorker[] = [
  welcome,
  prepare,
  { ...prepare, scaling: null },
  ask,
  runEnd,
];
export const toCoordinatorMessages: readonly ToCoordinator[] = [
  hello,
  answer,
  refusal,
  { ...refusal, remedy: 'Lower the rung.' },
];
