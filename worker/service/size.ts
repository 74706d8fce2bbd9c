import { type Checked, fail, succeed } from '../../protocol/failure.js';

const UNITS: Readonly<Record<string, number>> = {
  kb: 1e3,
  mb: 1e6,
  gb: 1e9,
  tb: 1e12,
  kib: 2 ** 10,
  mib: 2 ** 20,
  gib: 2 ** 30,
  tib: 2 ** 40,
};

/** Bytes of a size such as 512MB (a million bytes each) or 1.5GiB (2³⁰). Fails with `field-value`. */
export function bytesOfSize(text: string): Checked<number> {
  const [, number = '', unit = ''] = /^(\d+(?:\.\d+)?)\s*([a-z]+)$/i.exec(text.trim()) ?? [];
  const bytes = Number(number) * (UNITS[unit.toLowerCase()] ?? Number.NaN);
  if (number !== '' && Number.isSafeInteger(Math.floor(bytes)) && bytes >= 1)
    return succeed(Math.floor(bytes));
  return fail('field-value', `"${text}" is no size.`, {
    remedy: 'Give a number and a unit: 512MB, 2GB or 1.5GiB.',
  });
}

/** A size in words that `bytesOfSize` takes, rounded up. */
export function sizeText(bytes: number): string {
  if (bytes >= 1e10) return `${Math.ceil(bytes / 1e9)}GB`;
  return bytes >= 1e6 ? `${Math.ceil(bytes / 1e6)}MB` : `${Math.ceil(bytes / 1e3)}kB`;
}
