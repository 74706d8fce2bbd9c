import { describe, expect, test } from 'vitest';
import { buildRawShard } from '../../worker/design/build.js';
import { tableRequest } from '../../worker/design/request.js';
import { scaleShard } from '../../worker/design/scale.js';
import { surveyOf } from '../../worker/design/survey.js';
import { lossOf } from '../../worker/losses/index.js';
import { entriesOf } from '../support/dense.js';
import { levelsTerm, numericTerm, specification, table } from '../support/designs.js';
import { failureOf, soundValue } from '../support/tables.js';

const material = levelsTerm('material', ['pvc', 'steel'], 'pvc');
const materials = (...codes: number[]) => ({
  material: { levels: ['pvc', 'steel'], codes: Int32Array.from(codes) },
});

describe('what is read', () => {
  test('every column once, terms inside products among them', () => {
    const age = numericTerm('age');
    const spec = specification({
      offset: { kind: 'exposure', column: 'km' },
      weights: { column: 'w' },
      missing: 'drop',
      terms: [
        age,
        numericTerm('age', { power: 2 }),
        { kind: 'product', factors: [age, material], name: 'age:material' },
      ],
    });
    expect(tableRequest(spec, { index: 2, of: 3 })).toEqual({
      numeric: ['y', 'km', 'w', 'age'],
      levels: [{ column: 'material', levels: ['pvc', 'steel'] }],
      labels: [],
      missing: 'drop',
      shard: { index: 2, of: 3 },
    });
  });

  test('a logistic response with a positive class is read as two classes', () => {
    const spec = specification({
      loss: { kind: 'logistic' },
      response: { column: 'failed', positive: 'yes' },
    });
    expect(tableRequest(spec, { index: 1, of: 1 })).toMatchObject({
      numeric: [],
      levels: [{ column: 'failed', levels: ['yes'], others: 'one' }],
    });
  });
});

describe('the design', () => {
  test('columns are transformed, levels are indicators, products multiply', () => {
    const age = numericTerm('age');
    const spec = specification({
      terms: [
        numericTerm('d', 'log'),
        numericTerm('d', 'sqrt'),
        numericTerm('d', { power: 2 }),
        material,
        { kind: 'product', factors: [age, material], name: 'age:material' },
      ],
    });
    const data = table({ y: [1, 2], d: [4, 9], age: [-3, 5] }, materials(0, 1));
    const raw = soundValue(buildRawShard(spec, data));
    expect(raw.columns).toHaveLength(5);
    expect(entriesOf(raw)).toEqual(Float64Array.of(Math.log(4), 2, 16, 0, 0, Math.log(9), 3, 81, 1, 5));
    expect(raw.y).toEqual(Float64Array.of(1, 2));
    expect(raw.weights).toBeNull();
    expect(raw.offset).toBeNull();
  });

  test('exposure enters as its logarithm, an offset as it is', () => {
    const data = table({ y: [1, 2], e: [1, Math.E] });
    const exposed = specification({ loss: { kind: 'poisson' }, offset: { kind: 'exposure', column: 'e' } });
    expect(soundValue(buildRawShard(exposed, data)).offset).toEqual(Float64Array.of(0, 1));
    const offset = specification({ offset: { kind: 'offset', column: 'e' } });
    expect(soundValue(buildRawShard(offset, data)).offset).toEqual(Float64Array.of(1, Math.E));
  });

  test('the positive class is 1', () => {
    const spec = specification({
      loss: { kind: 'logistic' },
      response: { column: 'failed', positive: 'yes' },
    });
    const data = table({}, { failed: { levels: ['yes', 'no'], codes: Int32Array.of(1, 0, 0) } });
    expect(soundValue(buildRawShard(spec, data)).y).toEqual(Float64Array.of(0, 1, 1));
  });
});

describe('refusals name the row of the source', () => {
  const rows = [4, 9];
  test.each([
    ['log', 0],
    ['log', -1],
    ['sqrt', -0.5],
    [{ power: -1 }, 0],
    [{ power: 0.5 }, -4],
    [{ power: 40 }, 1e10],
  ] as const)('transform %j of %d', (transform, value) => {
    const spec = specification({ terms: [numericTerm('d', transform)] });
    const failure = failureOf(buildRawShard(spec, table({ y: [1, 1], d: [2, value] }, {}, rows)));
    expect(failure.code).toBe('value-not-finite');
    expect(failure.where?.row).toBe(9);
    expect(failure.where?.column).toMatch(/^d/);
  });

  test.each([
    ['logistic', 2],
    ['logistic', 0.5],
    ['poisson', -1],
    ['squared', 1e200],
  ] as const)('a %s response of %d', (kind, value) => {
    const failure = failureOf(
      buildRawShard(specification({ loss: { kind } }), table({ y: [1, value] }, {}, rows)),
    );
    expect(failure).toMatchObject({ code: 'response-range', where: { row: 9, column: 'y' } });
  });

  test.each([0, -2])('exposure %d', (value) => {
    const spec = specification({ loss: { kind: 'poisson' }, offset: { kind: 'exposure', column: 'e' } });
    const failure = failureOf(buildRawShard(spec, table({ y: [1, 1], e: [3, value] })));
    expect(failure).toMatchObject({ code: 'exposure-not-positive', where: { row: 2, column: 'e' } });
  });

  test('a negative weight', () => {
    const spec = specification({ weights: { column: 'w' } });
    const failure = failureOf(buildRawShard(spec, table({ y: [1, 1], w: [0, -1e-9] })));
    expect(failure).toMatchObject({ code: 'weight-negative', where: { row: 2, column: 'w' } });
  });

  test('an offset whose exponential would overflow', () => {
    const spec = specification({ offset: { kind: 'offset', column: 'o' } });
    const failure = failureOf(buildRawShard(spec, table({ y: [1], o: [800] })));
    expect(failure).toMatchObject({ code: 'value-not-finite', where: { row: 1, column: 'o' } });
  });

  test('a level that one of two terms does not list', () => {
    const factors = [numericTerm('age'), levelsTerm('material', ['pvc'], null)];
    const spec = specification({ terms: [material, { kind: 'product', factors, name: 'age:material' }] });
    const failure = failureOf(buildRawShard(spec, table({ y: [1, 2], age: [1, 1] }, materials(0, 1))));
    expect(failure).toMatchObject({ code: 'level-unknown', where: { row: 2, column: 'material' } });
  });

  test('no rows', () => {
    expect(failureOf(buildRawShard(specification({}), table({ y: [] }))).code).toBe('no-rows');
  });
});

describe('the survey', () => {
  test('moments and sums of a small table by hand', () => {
    const spec = specification({
      loss: { kind: 'poisson' },
      offset: { kind: 'exposure', column: 'e' },
      weights: { column: 'w' },
      terms: [numericTerm('a'), material],
    });
    const data = table({ y: [0, 1, 4], e: [1, 2, 5], w: [1, 3, 2], a: [1, 2, 6] }, materials(1, 1, 1));
    const survey = surveyOf(soundValue(buildRawShard(spec, data)), lossOf({ kind: 'poisson' }));
    expect(survey.rowsUsed).toBe(3);
    expect(survey.columns).toEqual(['a', 'material=steel']);
    expect(survey.mean).toEqual(Float64Array.of(3, 1));
    expect(survey.centredSquares).toEqual(Float64Array.of(14, 0));
    expect(survey.response.weightSum).toBe(6);
    expect(survey.response.weightedSum).toBe(11);
    expect(survey.response.exposureSum).toBeCloseTo(1 + 6 + 10, 12);
    expect(survey.response.least).toBe(0);
    expect(survey.response.most).toBe(4);
    expect(survey.response.saturatedLoss).toBeCloseTo(3 + 2 * (4 - 4 * Math.log(4)), 12);
    expect(survey.notes).toEqual(['No spread at this site: material=steel.']);
  });

  test('spread is exact beside a large mean, and a constant has none', () => {
    const base = 1e9;
    const spec = specification({ terms: [numericTerm('a'), numericTerm('b')] });
    const data = table({ y: [1, 2, 3, 4], a: [base, base + 1, base + 2, base + 3], b: [0.1, 0.1, 0.1, 0.1] });
    const survey = surveyOf(soundValue(buildRawShard(spec, data)), lossOf({ kind: 'squared' }));
    expect(survey.mean).toEqual(Float64Array.of(base + 1.5, 0.1));
    expect(survey.centredSquares).toEqual(Float64Array.of(5, 0));
  });

  test('remarks on a response without spread and on weights that are all zero', () => {
    const spec = specification({ weights: { column: 'w' } });
    const raw = soundValue(buildRawShard(spec, table({ y: [2, 2], w: [0, 0] })));
    expect(surveyOf({ ...raw, rowsDropped: 3 }, lossOf({ kind: 'squared' })).notes).toEqual([
      'Every row has the same response.',
      'Every row has weight zero.',
      'Rows left out for a missing value: 3.',
    ]);
  });
});

describe('scaling', () => {
  const spec = specification({ terms: [numericTerm('a'), numericTerm('b'), numericTerm('c')] });
  const raw = soundValue(
    buildRawShard(spec, table({ y: [1, 2], a: [3, 5], b: [7, 7], c: [10, 30] }, {}, [1, 3])),
  );
  const scaling = {
    rowCountTotal: 20,
    kept: [0, 2],
    center: Float64Array.of(4, 20),
    scale: Float64Array.of(2, 10),
  };

  test('with an intercept, ones come first', () => {
    const shard = scaleShard(raw, scaling, true);
    expect(shard.p).toBe(3);
    expect(entriesOf(shard)).toEqual(Float64Array.of(1, -0.5, -1, 1, 0.5, 1));
    expect(shard.rowCountTotal).toBe(20);
    expect(shard.y).toEqual(raw.y);
  });

  test('without one, only the columns kept', () => {
    const shard = scaleShard(raw, scaling, false);
    expect(shard.p).toBe(2);
    expect(entriesOf(shard)).toEqual(Float64Array.of(-0.5, -1, 0.5, 1));
  });
});
