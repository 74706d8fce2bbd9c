/**
 * How sums over rows are cut, by the number of rows and columns alone: so that one thread and several give the same bits.
 * Rows come in waves, each in up to `STRIPES_MOST` stripes of whole blocks with sums of their own, which are added in order.
 */
export const STRIPES_MOST = 32;
/** Rows of a wave: what has no place in the memory beforehand, or comes out, is kept for so many. */
export const WAVE_ROWS_MOST = 262_144;
const WAVE_NUMBERS = 33_554_432;
const WAVE_ROWS_LEAST = 1024;
/** A stripe of fewer numbers than these would not pay for its sums, nor for a thread's waking up. */
const STRIPE_NUMBERS = 32_768;
/** Stripes are whole blocks of the packed kernels. */
const ROUNDED = 256;

export const waveRows = (p: number): number =>
  Math.max(
    WAVE_ROWS_LEAST,
    Math.min(WAVE_ROWS_MOST, ROUNDED * Math.floor(WAVE_NUMBERS / (ROUNDED * Math.max(p, 1)))),
  );

/** Rows of each stripe of a wave of so many rows; the last stripe may have fewer. */
export const stripeRows = (rows: number, p: number): number =>
  ROUNDED * Math.ceil(Math.max(rows / STRIPES_MOST, STRIPE_NUMBERS / Math.max(p, 1), 1) / ROUNDED);

export interface Stretch {
  readonly from: number;
  readonly count: number;
}

/** 0 … rows in steps of at most `step`. */
export function stretches(rows: number, step: number): Stretch[] {
  const out: Stretch[] = [];
  for (let from = 0; from < rows; from += step) out.push({ from, count: Math.min(step, rows - from) });
  return out;
}

/**
 * Columns 0 … padded (a multiple of 4) in `count` bands of whole tiles with about as many entries of the lower triangle
 * each; where a band begins.
 */
export function bandStart(band: number, count: number, padded: number): number {
  return 4 * Math.round((padded * (1 - Math.sqrt(1 - band / count))) / 4);
}
