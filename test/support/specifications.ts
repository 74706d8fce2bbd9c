import { expect } from 'vitest';
import type { Failure } from '../../protocol/failure.js';
import type { ReportParts } from '../../protocol/specification/types.js';
import type { Parsed } from '../../protocol/specification/yaml-document.js';

/** Line by line, so that tests can say on which line something stands. */
export const BREAKS = [
  'commonfit: 1', // 1
  'title: Pipe breaks per kilometre-year', // 2
  'sites: [harrowmere, lindell-bay, castlefen, oakhythe]', // 3
  'response: {column: breaks}', // 4
  'loss: poisson', // 5
  'exposure: {column: km_years}', // 6
  'terms:', // 7
  '  - {column: age_years, unit: year}', // 8
  '  - {column: diameter_mm, unit: mm, transform: log}', // 9
  '  - {column: material, levels: [pvc, ductile-iron, cast-iron, steel], baseline: pvc}', // 10
  '  - {product: [age_years, material]}', // 11
  'penalty:', // 12
  '  - {kind: elastic-net, lambda: 0.01, l1: 0.5, per-term: {age_years: 0}}', // 13
  'rounds: {tolerance: 1e-8}', // 14
  'barrier: {deadline: 30s}', // 15
];

/** The specification with lines replaced (by 1-based number) and lines added at the end. */
export function breaksWith(
  replaced: Readonly<Record<number, string>>,
  added: readonly string[] = [],
): string {
  return [...BREAKS.map((line, index) => replaced[index + 1] ?? line), ...added].join('\n');
}

/** A report that asks for nothing. */
export const NO_REPORT: ReportParts = {
  covariance: false,
  sandwich: null,
  termTests: false,
  profile: [],
  debiased: false,
  margins: false,
  compareSites: false,
  fitQuality: false,
};

export function parsedValue<T>(parsed: Parsed<T>): T {
  if (!parsed.ok) expect.unreachable(JSON.stringify(parsed.failures, null, 1));
  return parsed.value;
}

export function failuresOf(parsed: Parsed<unknown>): Failure[] {
  if (parsed.ok) expect.unreachable('the document was accepted');
  return parsed.failures;
}

/** `code line field` of each failure. */
export const marks = (failures: readonly Failure[]): string[] =>
  failures.map(({ code, where }) => `${code} ${where?.line ?? '-'} ${where?.field ?? '-'}`);
