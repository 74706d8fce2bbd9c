import type { CrossValidationDocument } from './result-parts.js';

/** Losses of folds and their means; NaN where a fit did not end solved. */
export interface PooledFolds {
  readonly folds: CrossValidationDocument['folds'];
  readonly foldLoss: readonly (readonly number[])[];
  readonly mean: readonly number[];
  readonly standardError: readonly number[];
}

/** A loss per row this close to the least, relative to it, is a tie. */
const TIE = 1e-12;

/**
 * Mean held-out loss per λ over the folds, weighted by their rows, and its standard error
 * √(Σ_f n_f (loss_f − mean)² / N / (F − 1)) (Breiman, Friedman, Olshen, Stone 1984, §3.4; the weights as in common
 * practice). `foldLoss`: per fold, per λ, the mean over the fold's rows.
 */
export function pooledFolds(
  folds: CrossValidationDocument['folds'],
  foldLoss: readonly (readonly number[])[],
): PooledFolds {
  const rows = folds.reduce((sum, fold) => sum + fold.rows, 0);
  const weighted = (of: (fold: number) => number): number =>
    folds.reduce((sum, fold, f) => sum + fold.rows * of(f), 0) / rows;
  const mean = foldLoss[0].map((_, l) => weighted((f) => foldLoss[f][l]));
  const standardError = mean.map((average, l) =>
    Math.sqrt(weighted((f) => (foldLoss[f][l] - average) ** 2) / (folds.length - 1)),
  );
  return { folds, foldLoss, mean, standardError };
}

/** Where a list of losses is least; of ties, the one with the largest λ. NaN marks a fit that did not end solved. */
export function leastOf(losses: readonly number[], lambdas: readonly number[]): number | null {
  let best: number | null = null;
  for (const [l, loss] of losses.entries()) {
    if (!Number.isFinite(loss)) continue;
    if (best === null) {
      best = l;
      continue;
    }
    const tied = Math.abs(loss - losses[best]) <= TIE * Math.abs(losses[best]);
    if (tied ? lambdas[l] > lambdas[best] : loss < losses[best]) best = l;
  }
  return best;
}

/** The largest λ whose mean loss is within one standard error of the least (Breiman et al. 1984). */
export function oneStandardErrorOf(
  { mean, standardError }: Pick<PooledFolds, 'mean' | 'standardError'>,
  lambdas: readonly number[],
  minimum: number,
): number {
  const most = mean[minimum] + standardError[minimum];
  let chosen = minimum;
  for (const [l, loss] of mean.entries()) if (loss <= most && lambdas[l] > lambdas[chosen]) chosen = l;
  return chosen;
}
