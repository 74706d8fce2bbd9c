import { grouped } from '../phrases.js';

/** Numbers as the page shows them. What is no finite number is said to be absent, never printed. */

export const ABSENT = 'not available';
const MINUS = '\u2212';

const signed = (text: string): string => text.replaceAll('-', MINUS);

/** `12,345`. */
export const whole = (count: number): string => (Number.isFinite(count) ? grouped(count) : ABSENT);

/** Three significant digits unless told otherwise; an exponent only where the number is very small or very large. */
export function figure(value: number | null | undefined, digits = 3): string {
  if (value === null || value === undefined || !Number.isFinite(value)) return ABSENT;
  if (value === 0) return '0';
  const size = Math.abs(value);
  if (size < 1e-4 || size >= 1e7) return signed(value.toExponential(digits - 1).replace('e+', 'e'));
  if (size >= 10 ** digits) return signed(grouped(Math.round(value)));
  return signed(value.toPrecision(digits));
}

/** Ratios near 1 need more digits to differ from it: as many as the width of their interval asks for. */
export function ratioFigures(lower: number, estimate: number, upper: number): [string, string] {
  const width = upper - lower;
  const decimals = width > 0 && width < 0.1 ? Math.min(8, Math.ceil(-Math.log10(width)) + 1) : null;
  const shown = (value: number): string =>
    decimals === null || !Number.isFinite(value) || Math.abs(value) >= 100
      ? figure(value)
      : value.toFixed(decimals);
  return [shown(estimate), `${shown(lower)} to ${shown(upper)}`];
}

/** `0.012 to 0.034`. */
export const reach = (lower: number | null, upper: number | null): string =>
  `${figure(lower)} to ${figure(upper)}`;

/** Three decimals; `< 0.001` below. */
export function pValue(value: number | null): string {
  if (value === null || !Number.isFinite(value)) return ABSENT;
  return value < 0.001 ? '< 0.001' : value.toFixed(3);
}

/** `p < 0.001`, `p = 0.031`. */
export const pInWords = (value: number): string => {
  const text = pValue(value);
  return text.startsWith('<') ? `p ${text}` : `p = ${text}`;
};

/** A share as per cent: `41 %`, `0.4 %`. */
export function percent(share: number | null | undefined): string {
  if (share === null || share === undefined || !Number.isFinite(share)) return ABSENT;
  const value = share * 100;
  return `${signed(Math.abs(value) >= 10 || value === 0 ? String(Math.round(value)) : String(Number(value.toPrecision(2))))} %`;
}

/** `2031-05-04 10:15 UTC` of an ISO time in UTC. */
export const minuteOf = (iso: string): string => `${iso.slice(0, 10)} ${iso.slice(11, 16)} UTC`;

/** A tick of an axis, short: `0.05`, `−1`, `1e−8`. */
export function tick(value: number): string {
  const size = Math.abs(value);
  if (value !== 0 && (size < 1e-3 || size >= 1e5)) {
    return signed(value.toExponential(1).replace('.0e', 'e').replace('e+', 'e'));
  }
  return signed(String(Number(value.toPrecision(6))));
}
