import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { comparisonText, largestDifference } from '../../coordinator/report/comparison-text.js';
import { CAUTIONS, resultText } from '../../coordinator/report/result-text.js';
import { coefficientsCsv, roundsCsv } from '../../coordinator/report/tables.js';
import { NO_FITS } from '../../coordinator/run/documents.js';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { FitDocument, ResultDocument } from '../../coordinator/run/result.js';

const fitted = (more: Partial<FitDocument> = {}): FitDocument => ({
  lambda: 0.01,
  outcome: 'solved',
  reason: null,
  intercept: -3.25,
  coefficients: { age_years: 0.1 + 0.2, 'material=steel': -12.5, 'log(diameter_mm)': 0 },
  dropped: ['material=lead'],
  objective: 0.512345678,
  loss: 0.5,
  penalty: 0.012345678,
  deviance: 1234.5678,
  certificate: { kind: 'measured', gap: 1e-10, relativeGap: 2.4e-10, kkt: 3e-7 },
  rounds: 6,
  rung: 'curvature',
  ...more,
});
const result = (more: Partial<ResultDocument> = {}): ResultDocument => ({
  format: 1,
  outcome: 'solved',
  reason: null,
  title: 'Pipe breaks',
  specification: 'ab'.repeat(32),
  software: 'commonfit 0.1.0',
  sites: [
    { site: 'harrowmere', rowsUsed: 3000, rowsDropped: 12, kernel: 'plain' },
    { site: 'oakhythe', rowsUsed: null, rowsDropped: null, kernel: 'plain' },
  ],
  without: [],
  rowsTotal: 3000,
  rung: 'curvature',
  rungReason: 'every site lets curvature leave',
  tolerance: 1e-8,
  ...NO_FITS,
  fits: [fitted()],
  notes: ['material=lead has no rows'],
  rounds: 6,
  numbersSent: [
    { site: 'harrowmere', up: 12_345, down: 678 },
    { site: 'oakhythe', up: 1, down: 2 },
  ],
  ...more,
});

/** A naive reader of RFC 4180. */
function readCsv(text: string): string[][] {
  const rows: string[][] = [];
  let row: string[] = [];
  let field = '';
  let quoted = false;
  for (let at = 0; at < text.length; at++) {
    const letter = text[at] as string;
    if (quoted && letter === '"' && text[at + 1] === '"') {
      field += '"';
      at++;
    } else if (letter === '"') quoted = !quoted;
    else if (!quoted && letter === ',') {
      row.push(field);
      field = '';
    } else if (!quoted && letter === '\r' && text[at + 1] === '\n') {
      rows.push([...row, field]);
      row = [];
      field = '';
      at++;
    } else field += letter;
  }
  return rows;
}

describe('coefficients.csv', () => {
  test('one row a coefficient, the intercept first, lines ended by CR LF', () => {
    expect(coefficientsCsv(result())).toBe(
      'fit,lambda,term,coefficient\r\n' +
        '1,0.01,intercept,-3.25\r\n' +
        '1,0.01,age_years,0.30000000000000004\r\n' +
        '1,0.01,material=steel,-12.5\r\n' +
        '1,0.01,log(diameter_mm),0\r\n',
    );
  });

  test('without a penalty λ is empty, of several penalties all stand; without an intercept there is no row for it', () => {
    const fits = [
      fitted({ lambda: null, intercept: null }),
      fitted({ lambda: [0.5, 1e-7], intercept: null }),
    ];
    const rows = readCsv(coefficientsCsv(result({ fits })));
    expect(rows.slice(1).map((row) => row.slice(0, 2))).toEqual([
      ...Array(3).fill(['1', '']),
      ...Array(3).fill(['2', '0.5 1e-7']),
    ]);
  });

  test('every name and every finite double reads back the same', () => {
    const coefficient = fc.double({ noNaN: true, noDefaultInfinity: true });
    const name = fc.string({ unit: 'binary', minLength: 1 }).filter((text) => text !== '__proto__');
    fc.assert(
      fc.property(fc.dictionary(name, coefficient, { noNullPrototype: false }), (coefficients) => {
        const rows = readCsv(
          coefficientsCsv(result({ fits: [fitted({ intercept: null, coefficients })] })),
        ).slice(1);
        expect(rows.map((row) => row[2])).toEqual(Object.keys(coefficients));
        for (const row of rows) expect(Number(row[3])).toBe(coefficients[row[2] as string]);
      }),
    );
  });
});

describe('a result without a site', () => {
  test('says whose rows are not in the fit, and how many', () => {
    const without = [
      { site: 'castlefen', rowsUsed: 1204 },
      { site: 'lindell-bay', rowsUsed: null },
    ];
    const lines = resultText(result({ without }), 100).filter((line) => /Without/.test(line));
    expect(lines).toEqual([
      '  Without castlefen, which was given up on: its 1,204 rows are not in the fit.',
      '  Without lindell-bay, which was given up on: its rows are not in the fit.',
    ]);
  });
});

describe('rounds.csv', () => {
  const at = '2031-05-04T10:00:00.000Z';
  const round: LogEvent = {
    event: 'round',
    stage: 'solve',
    round: 1,
    roundsMost: 300,
    rung: 'proximal',
    purpose: 'gradient, and diagonal',
    fitsOpen: 1,
    fitsTotal: 2,
    relativeGap: null,
    gapMeasured: false,
    tolerance: 1e-8,
    primalResidual: null,
    dualResidual: 0.25,
    objective: 1.5,
    tookMs: 12,
    standIns: [],
    slowest: null,
    numbersUp: 40,
    numbersDown: 44,
    at,
  };

  test('names what stood in, and from when on a site was done without', () => {
    const standIns = [
      { site: 'castlefen', round: 3 },
      { site: 'oakhythe', round: null },
    ];
    const sites = [{ site: 'castlefen', rowsUsed: 1 }];
    const gone: LogEvent = { event: 'without', round: 1, sites, waitedMs: 1, at };
    const rows = readCsv(roundsCsv([{ ...round, standIns }, gone, round]));
    expect(rows.map((row) => row.slice(-2))).toEqual([
      ['stand_ins', 'without'],
      ['castlefen 3; oakhythe none', ''],
      ['', 'castlefen'],
    ]);
  });

  test('one row for each round event; what a round did not have is empty', () => {
    const text = roundsCsv([{ event: 'waiting', sites: ['oakhythe'], at }, round]);
    expect(text.split('\r\n')).toEqual([
      'round,at,rung,purpose,fits_open,fits_total,relative_gap,gap_measured,tolerance,primal_residual,dual_residual,objective,took_ms,slowest_site,slowest_ms,numbers_up,numbers_down,stand_ins,without',
      `1,${at},proximal,"gradient, and diagonal",1,2,,,1e-8,,0.25,1.5,12,,,40,44,,`,
      '',
    ]);
  });
});

describe('the result as text', () => {
  const text = (document: ResultDocument): string => resultText(document, 100).join(' ');

  test('decimal points stand under each other', () => {
    const lines = resultText(result(), 80).filter((line) =>
      /^ {2}(intercept|age_years|material=steel)/.test(line),
    );
    expect(lines).toEqual([
      '  intercept          -3.25',
      '  age_years           0.3',
      '  material=steel    -12.5',
    ]);
  });

  test('it says the certificate in words, dropped columns, rows and numbers of each site', () => {
    expect(text(result())).toContain('the objective is at most 2.4e-10 above the optimum (relative)');
    expect(text(result())).toContain('no spread at any site: material=lead');
    expect(text(result())).toContain(
      'harrowmere: 3,000 rows (12 left out); sent 12,345 numbers, received 678',
    );
    expect(text(result())).toContain('oakhythe: not surveyed');
  });

  test('an estimated certificate is called an estimate, a missing one is named', () => {
    const estimate = fitted({ certificate: { kind: 'estimate', gap: 1e-9, relativeGap: 1e-9, kkt: 1e-6 } });
    expect(text(result({ fits: [estimate] }))).toContain('an estimate only');
    expect(text(result({ fits: [fitted({ certificate: null })] }))).toContain('No certificate');
  });

  test('the cautions close every result, one without a fit included', () => {
    const none = text(
      result({ outcome: 'cancelled', fits: [], rowsTotal: null, rung: null, rungReason: null }),
    );
    expect(none).toContain('Not solved: the run was cancelled.');
    for (const caution of CAUTIONS) expect(none).toContain(caution);
  });

  test('of many fits the first are shown and the rest counted', () => {
    const fits = Array.from({ length: 12 }, (_, at) => fitted({ lambda: 2 ** -at }));
    expect(text(result({ fits }))).toContain('Fit 5 of 12, λ = 0.0625.');
    expect(text(result({ fits }))).toContain('7 more fits in coefficients.csv');
  });

  test.each([40, 60, 80])('nothing is wider than %i columns', (width) => {
    const long = fitted({ coefficients: { [`a${'b'.repeat(120)}`]: 1 / 3, c: -1e300 } });
    expect(resultText(result({ fits: [long] }), width).filter((line) => [...line].length > width)).toEqual(
      [],
    );
  });
});

describe('two results side by side', () => {
  test('the largest relative difference of a coefficient is named', () => {
    const other = result({
      fits: [fitted({ coefficients: { ...fitted().coefficients, age_years: 0.3 * (1 + 1e-6) } })],
    });
    expect(largestDifference(result(), other)?.name).toBe('age_years');
    expect(largestDifference(result(), other)?.size).toBeCloseTo(1e-6, 9);
    expect(
      comparisonText({ name: 'one', result: result() }, { name: 'two', result: other }, 80).join(' '),
    ).toContain('at most 1e-6 (age_years)');
  });

  test('equal results agree to the last bit; different coefficients are not compared', () => {
    const pair = (b: ResultDocument): string =>
      comparisonText({ name: 'one', result: result() }, { name: 'two', result: b }, 80).join(' ');
    expect(pair(result())).toContain('the same to the last bit');
    expect(pair(result({ fits: [fitted({ coefficients: { x: 1 } })] }))).toContain(
      'do not have the same coefficients',
    );
  });
});
