import {
  normalTwoSided,
  normalUpperQuantile,
  studentTwoSided,
  studentUpperQuantile,
} from '../../numerics/distributions.js';

/** Student's t with so many degrees of freedom; null: the normal distribution. */
export type Reference = number | null;

/** P(|T| > |statistic|). */
export const twoSided = (statistic: number, reference: Reference): number =>
  reference === null ? normalTwoSided(statistic) : studentTwoSided(statistic, reference);

/** The quantile that an interval of this level reaches to either side. */
export const reachOf = (level: number, reference: Reference): number =>
  reference === null
    ? normalUpperQuantile((1 - level) / 2)
    : studentUpperQuantile((1 - level) / 2, reference);

/** A Wald interval. */
export function interval(
  estimate: number,
  standardError: number,
  reach: number,
): {
  readonly estimate: number;
  readonly standardError: number;
  readonly lower: number;
  readonly upper: number;
} {
  return {
    estimate,
    standardError,
    lower: estimate - reach * standardError,
    upper: estimate + reach * standardError,
  };
}

/** p-values adjusted for their number (Holm 1979): the family-wise error rate is kept. In the order given. */
export function holm(pValues: readonly number[]): number[] {
  const order = orderOf(pValues);
  const out = new Array<number>(pValues.length);
  let most = 0;
  for (const [rank, at] of order.entries()) {
    most = Math.max(most, Math.min(1, (pValues.length - rank) * pValues[at]));
    out[at] = most;
  }
  return out;
}

/** p-values adjusted for the false discovery rate (Benjamini and Hochberg 1995). In the order given. */
export function benjaminiHochberg(pValues: readonly number[]): number[] {
  const order = orderOf(pValues);
  const out = new Array<number>(pValues.length);
  let least = 1;
  for (let rank = order.length - 1; rank >= 0; rank--) {
    least = Math.min(least, (pValues.length / (rank + 1)) * pValues[order[rank]]);
    out[order[rank]] = least;
  }
  return out;
}

const orderOf = (pValues: readonly number[]): number[] =>
  [...pValues.keys()].sort((a, b) => pValues[a] - pValues[b] || a - b);
