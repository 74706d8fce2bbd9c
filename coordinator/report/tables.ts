import type { LogEvent, RoundEvent } from '../run/log-event.js';
import type { FitDocument, ResultDocument } from '../run/result.js';
import type { CoefficientTest, InferenceDocument } from '../run/result-parts.js';
import { inferenceOf } from './model-document.js';

/**
 * `coefficients.csv` (RFC 4180, UTF-8): one row for each coefficient of each fit, the intercept first where there is
 * one. `fit` counts from 1; `lambda` is empty without a penalty, and its values are parted by spaces where several
 * penalties add up. Where the run measured uncertainty, the standard error, the ends of the interval and the p-value
 * follow, empty in a fit that has none. Numbers are the shortest decimals that read back to the same double.
 */
export function coefficientsCsv(result: ResultDocument): string {
  const inferences = result.fits.map((_, fit) => inferenceOf(result, fit));
  const withTests = inferences.some((inference) => inference !== null);
  const rows = result.fits.flatMap((fit, at) =>
    coefficientsOf(fit).map(([term, value]) => [
      String(at + 1),
      lambdaText(fit.lambda),
      term,
      number(value),
      ...(withTests ? testFields(testOf(inferences[at], term)) : []),
    ]),
  );
  const head = ['fit', 'lambda', 'term', 'coefficient'];
  return csv([withTests ? [...head, 'standard_error', 'lower', 'upper', 'p_value'] : head, ...rows]);
}

function testFields(test: CoefficientTest | null): string[] {
  if (test === null) return ['', '', '', ''];
  return [test.standardError, test.lower, test.upper, test.pValue].map(number);
}

/** The test of a coefficient, by the names of `coefficientsOf`. */
export function testOf(inference: InferenceDocument | null, name: string): CoefficientTest | null {
  const tests = inference?.coefficients ?? [];
  // in a covariance the intercept stands in brackets, so that no column can have its name
  const intercept = name === 'intercept' ? tests.find((test) => test.name === '(intercept)') : undefined;
  return intercept ?? tests.find((test) => test.name === name) ?? null;
}

/** The intercept under the name `intercept`, then the coefficients in the order of the design. */
export function coefficientsOf(fit: FitDocument): [string, number][] {
  const named = Object.entries(fit.coefficients);
  return fit.intercept === null ? named : [['intercept', fit.intercept], ...named];
}

/** `0.01`, or `0.01 0.2` where several penalties add up; empty without a penalty. */
export const lambdaText = (lambda: FitDocument['lambda']): string =>
  lambda === null ? '' : (typeof lambda === 'number' ? [lambda] : lambda).map(number).join(' ');

/** Columns of `rounds.csv`, units last. An empty field is a quantity the round did not have. */
const ROUND_COLUMNS: readonly [string, (round: RoundEvent) => string][] = [
  ['round', (round) => String(round.round)],
  ['at', (round) => round.at],
  ['rung', (round) => round.rung],
  ['purpose', (round) => round.purpose],
  ['fits_open', (round) => String(round.fitsOpen)],
  ['fits_total', (round) => String(round.fitsTotal)],
  ['relative_gap', (round) => optional(round.relativeGap)],
  ['gap_measured', (round) => (round.relativeGap === null ? '' : round.gapMeasured ? 'yes' : 'no')],
  ['tolerance', (round) => number(round.tolerance)],
  ['primal_residual', (round) => optional(round.primalResidual)],
  ['dual_residual', (round) => optional(round.dualResidual)],
  ['objective', (round) => optional(round.objective)],
  ['took_ms', (round) => number(round.tookMs)],
  ['slowest_site', (round) => round.slowest?.site ?? ''],
  ['slowest_ms', (round) => optional(round.slowest?.ms ?? null)],
  ['numbers_up', (round) => String(round.numbersUp)],
  ['numbers_down', (round) => String(round.numbersDown)],
  ['stand_ins', (round) => round.standIns.map(({ site, round: of }) => `${site} ${of ?? 'none'}`).join('; ')],
];

/**
 * `rounds.csv` (RFC 4180): one row for each round of the log, in the order of the log. `stand_ins` names the sites whose
 * older answers stood in, each with the round of its answer; `without` the sites that the run had gone on without.
 */
export function roundsCsv(events: readonly LogEvent[]): string {
  const rows: string[][] = [];
  const without: string[] = [];
  for (const event of events) {
    if (event.event === 'without') without.push(...event.sites.map(({ site }) => site));
    if (event.event === 'round')
      rows.push([...ROUND_COLUMNS.map(([, field]) => field(event)), without.join('; ')]);
  }
  return csv([[...ROUND_COLUMNS.map(([name]) => name), 'without'], ...rows]);
}

const optional = (value: number | null): string => (value === null ? '' : number(value));

/** ECMAScript's number to string is the shortest decimal that reads back; it only loses the sign of −0. */
const number = (value: number): string => (Object.is(value, -0) ? '-0' : String(value));

const csv = (rows: readonly (readonly string[])[]): string =>
  rows.map((row) => `${row.map(quoted).join(',')}\r\n`).join('');

const quoted = (field: string): string =>
  /[",\r\n]/.test(field) ? `"${field.replaceAll('"', '""')}"` : field;
