import { describe, expect, test } from 'vitest';
import { modelText } from '../../protocol/model/model-document.js';
import { parseModel } from '../../protocol/model/parse-model.js';
import { randomModel } from '../support/random-model.js';
import { failureOf, soundValue } from '../support/tables.js';

const model = randomModel(1);
const changed = (change: (document: Record<string, unknown>) => void): string => {
  const document = JSON.parse(modelText(model)) as Record<string, unknown>;
  change(document);
  return JSON.stringify(document);
};

describe('model.json', () => {
  test('reads back as what was written, every bit of a number', () => {
    for (let seed = 0; seed < 20; seed++) {
      const written = randomModel(seed);
      expect(soundValue(parseModel(modelText(written), 'model.json'))).toEqual(written);
    }
  });

  test.each([
    ['text that is no JSON', 'not json', 'field-type', undefined],
    ['a document of something else', '{"format": 1}', 'field-missing', 'commonfitModel'],
    [
      'a later format',
      changed((d) => Object.assign(d, { commonfitModel: 2 })),
      'not-supported',
      'commonfitModel',
    ],
    ['a field too many', changed((d) => Object.assign(d, { colour: 1 })), 'field-unknown', ''],
    ['a field that is missing', changed((d) => delete d.terms), 'field-missing', 'terms'],
    [
      'a field of another type',
      changed((d) => Object.assign(d, { intercept: '1' })),
      'field-type',
      'intercept',
    ],
    ['a loss that is not known', changed((d) => Object.assign(d, { loss: 'cubic' })), 'field-value', 'loss'],
    [
      'an inverse link of another loss',
      changed((d) =>
        Object.assign(d, { inverseLink: d.inverseLink === 'identity' ? 'logistic' : 'identity' }),
      ),
      'field-conflict',
      'inverseLink',
    ],
    [
      'a coefficient that is missing',
      changed((d) => (d.coefficients as unknown[]).pop()),
      'field-conflict',
      'coefficients',
    ],
    [
      'a coefficient twice',
      changed((d) => (d.coefficients as unknown[]).push((d.coefficients as unknown[])[0])),
      'field-conflict',
      'coefficients',
    ],
  ])('refuses %s', (_, text, code, field) => {
    const failure = failureOf(parseModel(text, 'model.json'));
    expect(failure.code).toBe(code);
    expect(failure.where).toEqual({ file: 'model.json', ...(field === undefined ? {} : { field }) });
  });
});
