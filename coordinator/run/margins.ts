import { quadraticForm } from '../inference/covariance.js';
import { interval, reachOf } from '../inference/tests.js';
import type { Description } from './description.js';
import type { Basis } from './infer.js';
import type { Grounds } from './problems.js';
import type { InferenceDocument } from './result-parts.js';

/**
 * Marginal means of levels and marginal effects of numeric columns: means over all rows, with intervals by the delta
 * method: var = gᵀ C g, g the mean derivative by θ.
 */
export function marginsOf(
  { specification }: Grounds,
  { margins }: Description,
  { covariance, level, degreesOfFreedom }: Basis,
): Pick<InferenceDocument, 'marginalMeans' | 'marginalEffects'> {
  if (margins === null) return { marginalMeans: [], marginalEffects: [] };
  const rows = margins.reduce((sum, own) => sum + own.rows, 0);
  const reach = reachOf(level, degreesOfFreedom);
  const pooled = margins[0].settings.map((_, k) => {
    const gradient = new Float64Array(margins[0].settings[k].gradient.length);
    let sum = 0;
    for (const { settings } of margins) {
      sum += settings[k].sum;
      for (let j = 0; j < gradient.length; j++) gradient[j] += settings[k].gradient[j] / rows;
    }
    return interval(sum / rows, Math.sqrt(quadraticForm(covariance, gradient)), reach);
  });
  const marginalMeans: InferenceDocument['marginalMeans'][number][] = [];
  const marginalEffects: InferenceDocument['marginalEffects'][number][] = [];
  for (const [k, setting] of marginSettings(specification).entries())
    if (setting.set === 'level')
      marginalMeans.push({ term: setting.column, level: setting.level, ...pooled[k] });
    else marginalEffects.push({ term: setting.column, unit: setting.unit, ...pooled[k] });
  return { marginalMeans, marginalEffects };
}

/** A setting of the margins work, and the unit of a numeric column. */
export type MarginSetting =
  | { readonly set: 'level'; readonly column: string; readonly level: string }
  | { readonly set: 'slope'; readonly column: string; readonly unit: string | null };

/** Every level of every column of levels, and the slope of every numeric column, each once, in the order of the terms. */
export function marginSettings({ terms }: Grounds['specification']): MarginSetting[] {
  const settings: MarginSetting[] = [];
  const seen = new Set<string>();
  for (const term of terms.flatMap((one) => (one.kind === 'product' ? one.factors : [one]))) {
    if (seen.has(term.column)) continue;
    seen.add(term.column);
    if (term.kind === 'numeric') settings.push({ set: 'slope', column: term.column, unit: term.unit });
    else for (const level of term.levels) settings.push({ set: 'level', column: term.column, level });
  }
  return settings;
}
