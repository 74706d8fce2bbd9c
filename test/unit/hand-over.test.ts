import { describe, expect, test } from 'vitest';
import { coefficientsLatex, coefficientsMarkdown } from '../../coordinator/report/coefficient-tables.js';
import { handOverFiles } from '../../coordinator/report/hand-over.js';
import { fitToHandOver, modelDocument } from '../../coordinator/report/model-document.js';
import { coefficientsCsv } from '../../coordinator/report/tables.js';
import { NO_FITS } from '../../coordinator/run/documents.js';
import type { FitDocument, ResultDocument } from '../../coordinator/run/result.js';
import type { InferenceDocument } from '../../coordinator/run/result-parts.js';
import { modelText } from '../../protocol/model/model-document.js';
import { parseModel } from '../../protocol/model/parse-model.js';
import { levelsTerm, numericTerm, specification } from '../support/designs.js';
import { soundValue } from '../support/tables.js';

const spec = specification({
  title: 'Breaks & bursts_100%',
  loss: { kind: 'poisson' },
  offset: { kind: 'exposure', column: 'km_years' },
  response: { column: 'breaks', positive: null },
  terms: [
    { ...numericTerm('age_years'), unit: 'year' },
    numericTerm('diameter_mm', 'log'),
    levelsTerm('material', ['pvc', 'steel', 'lead'], 'pvc'),
  ],
});

const fitted = (more: Partial<FitDocument> = {}): FitDocument => ({
  lambda: 0.01,
  outcome: 'solved',
  reason: null,
  intercept: -3.25,
  coefficients: { diameter_mm: -0.000012345, age_years: 0.1 + 0.2, 'material=steel': 0 },
  dropped: ['material=lead'],
  objective: 1,
  loss: 1,
  penalty: 0,
  deviance: 2,
  certificate: { kind: 'measured', gap: 1e-10, relativeGap: 2.4e-10, kkt: 3e-7 },
  rounds: 6,
  rung: 'curvature',
  ...more,
});

const result = (...fits: FitDocument[]): ResultDocument => ({
  format: 1,
  outcome: 'solved',
  reason: null,
  title: spec.title,
  specification: 'ab'.repeat(32),
  software: 'commonfit 0.1.0',
  sites: ['harrowmere', 'oakhythe'].map((site) => ({ site, rowsUsed: 10, rowsDropped: 0, kernel: 'plain' })),
  without: [],
  rowsTotal: 20,
  rung: 'curvature',
  rungReason: null,
  tolerance: 1e-8,
  ...NO_FITS,
  fits,
  chosen: fits.length === 1 ? 0 : null,
  notes: [],
  rounds: 6,
  numbersSent: [],
});

const test95 = (name: string, estimate: number): InferenceDocument['coefficients'][number] => ({
  name,
  estimate,
  standardError: 0.5,
  lower: estimate - 0.98,
  upper: estimate + 0.98,
  statistic: estimate / 0.5,
  pValue: 0.0004,
  pHolm: null,
  pBenjaminiHochberg: null,
});
const inference: InferenceDocument = {
  level: 0.95,
  degreesOfFreedom: null,
  dispersion: { kind: 'fixed', value: 1 },
  used: 'model',
  covariances: [
    {
      kind: 'model',
      order: ['(intercept)', 'age_years'],
      covariance: [
        [1, 0.5],
        [0.5, 2],
      ],
      standardErrors: {},
      clusters: null,
    },
  ],
  coefficients: [test95('(intercept)', -3.25), test95('age_years', 0.3)],
  terms: [],
  profile: [],
  debiased: [],
  marginalMeans: [],
  marginalEffects: [],
  cautions: ['Penalised: the intervals are too short.'],
};
const inferred = (): ResultDocument => ({ ...result(fitted()), inference });

describe('model.json of a run', () => {
  test('holds what scoring needs, in the order of the design, and reads back', () => {
    const model = modelDocument(spec, result(fitted(), fitted({ lambda: 0.1 })), 1);
    expect(model).toMatchObject({
      fit: { number: 2, of: 2, lambda: 0.1, outcome: 'solved' },
      sites: ['harrowmere', 'oakhythe'],
      inverseLink: 'exponential',
      offset: { kind: 'exposure', column: 'km_years' },
      coefficients: [
        { name: 'age_years', value: 0.1 + 0.2 },
        { name: 'diameter_mm', value: -0.000012345 },
        { name: 'material=steel', value: 0 },
      ],
      dropped: ['material=lead'],
    });
    expect(soundValue(parseModel(modelText(model), 'model.json'))).toEqual(model);
  });

  test('holds the covariance that the intervals use, where there is one', () => {
    const model = modelDocument(spec, inferred(), 0);
    expect(model.covariance).toEqual({
      kind: 'model',
      order: ['(intercept)', 'age_years'],
      matrix: [
        [1, 0.5],
        [0.5, 2],
      ],
    });
    expect(soundValue(parseModel(modelText(model), 'model.json'))).toEqual(model);
  });

  test('is of the chosen fit or of the only one that has coefficients', () => {
    expect(fitToHandOver(result(fitted()))).toBe(0);
    expect(fitToHandOver(result(fitted(), fitted()))).toBeNull();
    expect(fitToHandOver(result())).toBeNull();
    expect(fitToHandOver(result(fitted({ intercept: null, coefficients: {} })))).toBeNull();
    expect(fitToHandOver({ ...result(fitted(), fitted()), chosen: 1 })).toBe(1);
  });

  test('comes with PMML and tables', () => {
    const names = handOverFiles(spec, result(fitted()), 0).map(([name]) => name);
    expect(names).toEqual(['model.json', 'model.pmml', 'coefficients.md', 'coefficients.tex']);
  });
});

describe('coefficients as a table', () => {
  test('Markdown, letters with a meaning escaped', () => {
    expect(coefficientsMarkdown('a|b', fitted({ dropped: [] }), null)).toBe(
      [
        '**a\\|b**',
        '',
        '| Term | Coefficient |',
        '| :-- | --: |',
        '| intercept | -3.250 |',
        '| diameter\\_mm | -1.234e-5 |',
        '| age\\_years | 0.3000 |',
        '| material=steel | 0 |',
        '',
        '',
      ].join('\n'),
    );
  });

  test('Markdown with intervals, empty where a coefficient has none', () => {
    const text = coefficientsMarkdown('t', fitted(), inference);
    expect(text).toContain('| Term | Coefficient | Standard error | 95 % from | 95 % to | p |');
    expect(text).toContain('| intercept | -3.250 | 0.5000 | -4.230 | -2.270 | \\<0.001 |');
    expect(text).toContain('| material=steel | 0 |  |  |  |  |');
    expect(text).toContain('Penalised: the intervals are too short.');
  });

  test('LaTeX, figures in mathematics and names escaped', () => {
    const odd = fitted({ coefficients: { '[a]_b^2 & 50% \\x': 1e-9, '{y}~"z"': 2 } });
    expect(coefficientsLatex('50%\nsure', odd, null).split('\n')).toEqual([
      '% 50% sure',
      '\\begin{tabular}{lr}',
      '\\hline',
      'Term & Coefficient \\\\',
      '\\hline',
      'intercept & $-3.250$ \\\\',
      '{[}a{]}\\_b\\textasciicircum{}2 \\& 50\\% \\textbackslash{}x & $1.000 \\times 10^{-9}$ \\\\',
      '\\{y\\}\\textasciitilde{}\\char34{}z\\char34{} & $2.000$ \\\\',
      '\\hline',
      '\\end{tabular}',
      '',
    ]);
    expect(coefficientsLatex('t', fitted(), inference)).toContain('95 \\% from');
  });

  test('CSV has standard errors and intervals where a fit has them', () => {
    const [head, first] = coefficientsCsv(inferred()).split('\r\n');
    expect(head).toBe('fit,lambda,term,coefficient,standard_error,lower,upper,p_value');
    expect(first).toBe('1,0.01,intercept,-3.25,0.5,-4.23,-2.27,0.0004');
    expect(coefficientsCsv(result(fitted()))).toContain('fit,lambda,term,coefficient\r\n');
  });
});
