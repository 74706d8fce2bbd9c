import { figure, percent, pValue, reach } from './figures.js';
import type { ReportInput } from './input.js';
import { html } from './markup.js';
import { type Section, table } from './parts.js';

/** Tests of whole terms; null where there are none. */
export function termTestsSection({ result }: ReportInput): Section | null {
  const { inference } = result;
  if (inference === null || inference.terms.length === 0) return null;
  const estimated = inference.dispersion.kind !== 'fixed';
  return {
    id: 'terms',
    heading: 'Tests of terms',
    body: [
      html`<p>Each term is left out and the fit made again: ${estimated ? 'F tests, as the dispersion is estimated' : 'likelihood-ratio tests against χ²'}.</p>`,
      table({
        id: 'terms-table',
        caption: 'Terms, each against the fit without it',
        columns: [
          'Term',
          { number: estimated ? 'F' : 'χ²' },
          { number: 'Degrees of freedom' },
          { number: 'p' },
          { number: 'p (Holm)' },
          { number: 'p (B–H)' },
        ],
        rows: inference.terms.map((one) => [
          one.term,
          figure(one.statistic),
          one.degreesOfFreedom,
          pValue(one.pValue),
          pValue(one.pHolm),
          pValue(one.pBenjaminiHochberg),
        ]),
      }),
    ],
  };
}

/** Mean predictions and effects; null where there are none. */
export function marginsSection({ result, specification }: ReportInput): Section | null {
  const { inference } = result;
  if (inference === null || inference.marginalMeans.length + inference.marginalEffects.length === 0)
    return null;
  const level = percent(inference.level);
  const { column, positive } = specification.response;
  const response = positive === null ? column : `${column} being ${positive}`;
  return {
    id: 'margins',
    heading: 'What it means on the response’s own scale',
    body: [
      html`<p>Means of predictions of ${response} over the rows that took part, with intervals of ${level} by the delta method.</p>`,
      inference.marginalMeans.length === 0
        ? null
        : table({
            id: 'means-table',
            caption: 'Mean prediction with every row at that level, other columns as they are',
            columns: ['Term', 'Level', { number: 'Mean' }, { number: 'Interval' }],
            rows: inference.marginalMeans.map((one) => [
              one.term,
              one.level,
              figure(one.estimate),
              reach(one.lower, one.upper),
            ]),
          }),
      inference.marginalEffects.length === 0
        ? null
        : table({
            id: 'effects-table',
            caption: 'Mean change of the prediction for one unit of the column more',
            columns: ['Term', 'Unit', { number: 'Mean change' }, { number: 'Interval' }],
            rows: inference.marginalEffects.map((one) => [
              one.term,
              one.unit ?? 'one',
              figure(one.estimate),
              reach(one.lower, one.upper),
            ]),
          }),
    ],
  };
}
