import { holm } from '../inference/tests.js';
import type { ComparisonDocument } from './result-parts.js';

/** A p-value under which sites are said to differ. */
const DOUBT = 0.05;
/** Share of the variation that is called large (Higgins, Thompson, Deeks, Altman 2003: 50 % moderate, 75 % high). */
const I2_LARGE = 0.5;
/** A change on leaving a site out that is worth a sentence, as a multiple of what chance alone brings about. */
const CHANGE_LARGE = 2.5;

/** What a comparison means and what to do about it, in plain sentences. */
export function comparisonWords(
  { sites, heterogeneity, commonModel }: Omit<ComparisonDocument, 'words'>,
  names: readonly string[],
): string[] {
  const words: string[] = [];
  if (commonModel !== null)
    words.push(
      commonModel.pValue < DOUBT
        ? `The sites do not share one model: a model of their own at every site fits better than chance explains (p = ${inWords(commonModel.pValue)}).`
        : `The sites may share one model: models of their own fit no better than chance explains (p = ${inWords(commonModel.pValue)}).`,
    );
  // many coefficients are looked at together
  const adjusted = holm(heterogeneity.map(({ pValue }) => pValue));
  const apart = heterogeneity.filter(({ i2 }, k) => adjusted[k] < DOUBT && i2 >= I2_LARGE);
  const slopes = apart.filter(({ name }) => name !== '(intercept)').map(({ name }) => name);
  if (apart.length > slopes.length)
    words.push(
      'The sites differ in their level: an intercept for each (`intercept: per-site`) takes that up.',
    );
  if (slopes.length > 0)
    words.push(
      `The sites differ in ${listOf(slopes)}: the common value is an average over different effects. A product with the site, or separate models, would show them.`,
    );
  for (const { site, leftOut, informationShare } of sites) {
    const moved = names.filter((name) => {
      const share = informationShare[name] ?? 0;
      // leaving out a share s of the information moves an estimate by √(s / (1 − s)) standard errors by chance
      const byChance = Math.sqrt(share / (1 - share));
      return (
        Math.abs(leftOut?.[name]?.changeInStandardErrors ?? 0) >= CHANGE_LARGE * byChance && byChance > 0
      );
    });
    if (moved.length > 0)
      words.push(
        `Without ${site}, ${listOf(moved)} would move by more than chance explains: look at its table first; leaving it out is a choice to be stated.`,
      );
  }
  if (words.length === 0 && heterogeneity.length > 0)
    words.push('Nothing speaks against one model for all sites.');
  return words;
}

const listOf = (names: readonly string[]): string =>
  names.length === 1 ? names[0] : `${names.slice(0, -1).join(', ')} and ${names[names.length - 1]}`;

const inWords = (p: number): string => (p < 0.001 ? 'less than 0.001' : p.toFixed(3));
