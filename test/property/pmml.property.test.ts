import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { pmmlOf } from '../../coordinator/report/pmml.js';
import type { ModelDocument } from '../../protocol/model/model-document.js';
import { Predictor } from '../../worker/design/predictor.js';
import { lossMean } from '../../worker/losses/index.js';
import { levelsTerm, numericTerm } from '../support/designs.js';
import { evaluatePmml } from '../support/pmml-evaluator.js';
import { modelDocument, type PipeRow, randomModel, randomRows } from '../support/random-model.js';
import { failureOf, soundValue } from '../support/tables.js';
import { readXml } from '../support/xml-reader.js';

function predictions(model: ModelDocument, rows: readonly PipeRow[]): number[] {
  const predictor = new Predictor(model);
  const values = predictor.inputs.map(({ column, levels }) =>
    Float64Array.from(rows, (row) =>
      levels === null ? Number(row[column]) : levels.indexOf(String(row[column])),
    ),
  );
  return [...predictor.predict(values, rows.length)].map(lossMean(model.loss));
}

describe('model.pmml', () => {
  test('read by the words of the standard, predicts what score does', () => {
    fc.assert(
      fc.property(fc.nat(), fc.integer({ min: 1, max: 20 }), (seed, count) => {
        const model = randomModel(seed);
        const rows = randomRows(seed + 1, count);
        const evaluate = evaluatePmml(soundValue(pmmlOf(model)));
        predictions(model, rows).forEach((prediction, at) => {
          const found = evaluate(rows[at]);
          // sums in another order; the inverse link enlarges what they differ by at most by the size of the predictor
          expect(Math.abs((found ?? Number.NaN) - prediction)).toBeLessThanOrEqual(
            1e-11 * (1 + Math.abs(prediction)),
          );
        });
      }),
      { numRuns: 300 },
    );
  });

  const material = levelsTerm('material', ['pvc', 'steel', 'lead'], 'pvc');
  const model = modelDocument({
    loss: 'poisson',
    inverseLink: 'exponential',
    offset: { kind: 'exposure', column: 'km_years' },
    terms: [numericTerm('age_years', 'sqrt'), material],
    coefficients: [
      { name: 'age_years', value: 0.5 },
      { name: 'material=steel', value: 1 },
    ],
    dropped: ['material=lead'],
  });
  const sound = { age_years: 4, material: 'steel', km_years: 2 };

  test('the expected count is exp(η) with ln(exposure) in η', () => {
    const evaluate = evaluatePmml(soundValue(pmmlOf(model)));
    expect(evaluate(sound)).toBeCloseTo(2 * Math.exp(0.5 + 0.5 * 2 + 1), 10);
    expect(evaluate({ ...sound, material: 'pvc' })).toBeCloseTo(2 * Math.exp(0.5 + 0.5 * 2), 10);
  });

  test.each([
    ['a missing value', { age_years: null }],
    ['a missing level', { material: '' }],
    ['a level that is not listed', { material: 'copper' }],
    ['a level no row of the fit had', { material: 'lead' }],
    ['a value the transform does not take', { age_years: -1 }],
    ['an exposure of 0', { km_years: 0 }],
  ])('%s makes the result invalid, never the baseline’s', (_, change) => {
    expect(evaluatePmml(soundValue(pmmlOf(model)))({ ...sound, ...change })).toBeNull();
  });

  test('names are carried whatever letters they have, but for those XML has none for', () => {
    const odd = (column: string) =>
      pmmlOf(
        modelDocument({
          title: '<&">',
          terms: [numericTerm(column)],
          coefficients: [{ name: column, value: 1 }],
        }),
      );
    for (const column of ['a<b', '"quoted"', 'a & b', 'tab\there', 'два', '😀'])
      expect(evaluatePmml(soundValue(odd(column)))({ [column]: 2 })).toBe(2.5);
    expect(failureOf(odd('bell\u0007')).code).toBe('not-supported');
  });

  test('the reader of this test refuses what is not well-formed', () => {
    const head = '<?xml version="1.0" encoding="UTF-8"?>';
    for (const wrong of [
      '<a>',
      '<a></b>',
      '<a b="1" b="2"/>',
      '<a b=1/>',
      '<a>&x;</a>',
      '<a/><b/>',
      '<a b="<"/>',
    ])
      expect(() => readXml(`${head}${wrong}`)).toThrow();
    expect(readXml(`${head}<a b="&lt;"> <c/> </a>`).attributes.get('b')).toBe('<');
  });
});
