import type { ResultDocument } from '../run/result.js';
import { counted, grouped, roughly, wrapped } from './phrases.js';
import { coefficientsOf } from './tables.js';

/** A result and what to call it beside another. */
export interface Named {
  readonly name: string;
  readonly result: ResultDocument;
}

/** Two runs of one specification side by side: what each took, and how well the coefficients agree. */
export function comparisonText(a: Named, b: Named, width: number): string[] {
  const rows: [string, (result: ResultDocument) => string][] = [
    ['ended as', (result) => result.outcome],
    ['rung', (result) => result.rung ?? 'none'],
    ['rounds after the survey', (result) => grouped(result.rounds)],
    ['numbers the sites sent', (result) => grouped(total(result, 'up'))],
    ['numbers sent to the sites', (result) => grouped(total(result, 'down'))],
    ['certificate, relative', (result) => gapText(result)],
  ];
  const columns = [a, b].map(({ name, result }) => [name, ...rows.map(([, figure]) => figure(result))]);
  const labels = ['', ...rows.map(([label]) => label)];
  const labelWidth = Math.max(...labels.map((label) => label.length));
  const widths = columns.map((column) => Math.max(...column.map((cell) => cell.length)));
  const lines = labels.map(
    (label, at) =>
      `  ${label.padEnd(labelWidth)}${columns.map((column, side) => `   ${(column[at] ?? '').padStart(widths[side] ?? 0)}`).join('')}`,
  );
  return [...lines, '', ...wrapped(agreementText(a.result, b.result), width)];
}

const total = (result: ResultDocument, direction: 'up' | 'down'): number =>
  result.numbersSent.reduce((sum, entry) => sum + entry[direction], 0);

function gapText(result: ResultDocument): string {
  const gaps = result.fits.map((fit) => fit.certificate?.relativeGap ?? null);
  if (gaps.length === 0 || gaps.includes(null)) return 'none';
  return roughly(Math.max(...(gaps as number[])));
}

/** Largest |a − b| / max(|a|, |b|) over all coefficients of all fits, 0 where both are 0; null where names differ. */
export function largestDifference(
  a: ResultDocument,
  b: ResultDocument,
): { name: string; size: number } | null {
  if (a.fits.length !== b.fits.length || a.fits.length === 0) return null;
  let largest = { name: '', size: 0 };
  for (const [at, fit] of a.fits.entries()) {
    const others = new Map(coefficientsOf(b.fits[at] as typeof fit));
    const own = coefficientsOf(fit);
    if (others.size !== own.length) return null;
    for (const [name, value] of own) {
      const other = others.get(name);
      if (other === undefined) return null;
      const scale = Math.max(Math.abs(value), Math.abs(other));
      const size = scale === 0 ? 0 : Math.abs(value - other) / scale;
      if (size > largest.size) largest = { name, size };
    }
  }
  return largest;
}

function agreementText(a: ResultDocument, b: ResultDocument): string {
  const difference = largestDifference(a, b);
  if (difference === null) return 'The two do not have the same coefficients to compare.';
  const count = a.fits.reduce((sum, fit) => sum + coefficientsOf(fit).length, 0);
  if (difference.size === 0) return `All ${counted(count, 'coefficient')} are the same to the last bit.`;
  return `Both give the same ${counted(count, 'coefficient')} but for a relative difference of at most ${roughly(difference.size)} (${difference.name}).`;
}
