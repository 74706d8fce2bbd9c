import type { Moments } from './rows.js';

/** Calls `look` for blocks of rows, row-major, in their order; the same ones at every call. */
export type EachBlock = (look: (x: Float64Array) => void) => void;

/**
 * Moments of `rowCount` rows (at least one) of p columns. Two passes with the correction of Chan, Golub and LeVeque (1983,
 * Am. Stat. 37:242), whose error does not grow with the mean. The bits do not depend on where blocks end.
 */
export function momentsOf(p: number, rowCount: number, each: EachBlock): Moments {
  const mean = new Float64Array(p);
  each((x) => {
    for (let at = 0; at < x.length; at += p) for (let j = 0; j < p; j++) mean[j] += x[at + j];
  });
  for (let j = 0; j < p; j++) mean[j] /= rowCount;
  const rest = new Float64Array(p);
  const centredSquares = new Float64Array(p);
  const constant = new Array<boolean>(p).fill(true);
  let first: Float64Array | null = null;
  each((x) => {
    first ??= x.slice(0, p);
    addDeviations({ mean, rest, centredSquares, constant, first }, x);
  });
  for (let j = 0; j < p; j++) {
    // a constant column has no spread at all, which rounding of the mean must not hide
    if (constant[j]) {
      mean[j] = first?.[j] ?? 0;
      centredSquares[j] = 0;
      continue;
    }
    centredSquares[j] = Math.max(0, centredSquares[j] - (rest[j] * rest[j]) / rowCount);
    mean[j] += rest[j] / rowCount;
  }
  return { mean, centredSquares, constant };
}

interface Deviations {
  readonly mean: Float64Array;
  readonly rest: Float64Array;
  readonly centredSquares: Float64Array;
  readonly constant: boolean[];
  readonly first: Float64Array;
}

function addDeviations({ mean, rest, centredSquares, constant, first }: Deviations, x: Float64Array): void {
  const p = mean.length;
  for (let at = 0; at < x.length; at += p)
    for (let j = 0; j < p; j++) {
      const away = x[at + j] - mean[j];
      rest[j] += away;
      centredSquares[j] += away * away;
      if (x[at + j] !== first[j]) constant[j] = false;
    }
}
