import { dot, line, link, type PlotOptions } from '@observablehq/plot';
import type { FitQualityDocument } from '../../run/result-parts.js';
import { counted } from '../phrases.js';
import { figure, percent, tick, whole } from './figures.js';
import type { ReportInput } from './input.js';
import { type Content, coded, html } from './markup.js';
import { definitions, paragraphs, type Section, subheading, table } from './parts.js';
import { pictureMarkup } from './picture.js';

/** Points of the ranking curve in the table. */
const RANKING_ROWS_MOST = 24;

/** How well it fits, from counts and sums; null where it was not asked or not told. */
export function qualitySection({ result }: ReportInput): Section | null {
  const quality = result.fitQuality;
  if (quality === null) return null;
  const { zeros } = quality;
  return {
    id: 'quality',
    heading: 'How well it fits',
    body: [
      paragraphs(quality.words.map(coded)),
      definitions([
        ['Deviance', figure(quality.deviance, 6)],
        ['Deviance of the intercept alone', figure(quality.nullDeviance, 6)],
        ['Deviance explained, on the rows fitted', percent(quality.devianceExplained)],
        [
          'Deviance per row on rows held out',
          quality.crossValidatedDeviance === null ? 'no folds' : figure(quality.crossValidatedDeviance, 4),
        ],
        ['Dispersion (Pearson)', figure(quality.pearsonDispersion)],
        ...(zeros === null
          ? []
          : [
              [
                'Rows with zero',
                `${whole(zeros.observed)} seen, ${figure(zeros.expected, 4)} expected`,
              ] as const,
            ]),
      ]),
      calibration(quality),
      ranking(quality),
      subheading('Residuals and leverage by site'),
      residuals(quality),
    ],
  };
}

function calibration({ calibration: known }: FitQualityDocument): Content {
  const bins =
    known?.bins.filter(({ predicted, observed }) => [predicted, observed].every(Number.isFinite)) ?? [];
  if (known === null || bins.length === 0) return null;
  const suppressed =
    known.rowsSuppressed === 0
      ? ''
      : ` ${counted(known.rowsSuppressed, 'row')} in cells too small to be told ${known.rowsSuppressed === 1 ? 'is' : 'are'} left out.`;
  return [
    subheading('Calibration'),
    pictureMarkup({
      id: 'calibration-picture',
      title: 'Observed against predicted',
      description: `${counted(bins.length, 'bin')} of rows by prediction. On the diagonal, what was observed is what was predicted. The table has the numbers.`,
      caption: `A circle for each bin of rows, its area by their number. Dashed: observed equals predicted.${suppressed}`,
      options: calibrationPlot(bins),
    }),
    table({
      id: 'calibration-table',
      caption: 'Mean observed and predicted by bin',
      folded: true,
      columns: [
        'Bin',
        { number: 'Rows' },
        { number: 'Predicted' },
        { number: 'Observed' },
        { number: 'Observed less predicted' },
      ],
      rows: bins.map((one, at) => [
        at + 1,
        whole(one.rows),
        figure(one.predicted),
        figure(one.observed),
        figure(one.observed - one.predicted, 2),
      ]),
    }),
  ];
}

function calibrationPlot(bins: NonNullable<FitQualityDocument['calibration']>['bins']): PlotOptions {
  const values = bins.flatMap(({ predicted, observed }) => [predicted, observed]);
  const least = Math.min(0, ...values);
  const most = Math.max(...values) * 1.06 || 1;
  const rows = Math.max(...bins.map((one) => one.rows));
  const axis = { domain: [least, most], labelArrow: 'none' as const, tickFormat: tick, ticks: 6 };
  return {
    width: 460,
    height: 400,
    marginLeft: 64,
    marginBottom: 44,
    marginTop: 28,
    marginRight: 16,
    x: { ...axis, label: 'predicted', labelAnchor: 'center', labelOffset: 38, tickSize: 4 },
    y: { ...axis, label: 'observed', tickSize: 0, grid: true, labelOffset: 60 },
    r: { type: 'sqrt', domain: [0, rows], range: [2, 10] },
    marks: [
      link([{}], {
        x1: () => least,
        y1: () => least,
        x2: () => most,
        y2: () => most,
        stroke: 'var(--soft)',
        strokeDasharray: '4,3',
      }),
      dot(bins, {
        x: 'predicted',
        y: 'observed',
        r: 'rows',
        fill: 'var(--mark)',
        fillOpacity: 0.35,
        stroke: 'var(--mark)',
        strokeWidth: 1.5,
      }),
    ],
  };
}

function ranking({ ranking: known }: FitQualityDocument): Content {
  if (known === null) return null;
  const { curve, area } = known;
  const every = Math.max(1, Math.ceil(curve.length / RANKING_ROWS_MOST));
  return [
    subheading('Ranking'),
    html`<p>A row with the response is ranked above a row without it ${percent(area)} of the time (area under the curve ${figure(area)}; 0.5 is chance).</p>`,
    pictureMarkup({
      id: 'ranking-picture',
      title: 'Ranking curve',
      description: `The share of rows with the response that are ranked above a threshold, against the share of rows without it; area ${figure(area)}. The table has the numbers.`,
      caption: 'Solid: the fit. Dashed: ranking by chance.',
      options: {
        width: 460,
        height: 400,
        marginLeft: 64,
        marginBottom: 44,
        marginTop: 28,
        marginRight: 16,
        x: {
          domain: [0, 1],
          label: 'share of rows without the response',
          labelArrow: 'none',
          labelAnchor: 'center',
          labelOffset: 38,
          tickFormat: tick,
          tickSize: 4,
          ticks: 6,
        },
        y: {
          domain: [0, 1],
          label: 'share of rows with it',
          labelArrow: 'none',
          tickFormat: tick,
          tickSize: 0,
          grid: true,
          labelOffset: 60,
          ticks: 6,
        },
        marks: [
          link([{}], {
            x1: () => 0,
            y1: () => 0,
            x2: () => 1,
            y2: () => 1,
            stroke: 'var(--soft)',
            strokeDasharray: '4,3',
          }),
          line(curve, { x: 'falseShare', y: 'trueShare', stroke: 'var(--mark)', strokeWidth: 2 }),
        ],
      },
    }),
    table({
      id: 'ranking-table',
      caption: 'Points of the ranking curve',
      folded: true,
      columns: ['Point', { number: 'Without the response' }, { number: 'With it' }],
      rows: curve
        .map((one, at) => [at + 1, percent(one.falseShare), percent(one.trueShare)])
        .filter((_, at) => at % every === 0 || at === curve.length - 1),
    }),
  ];
}

function residuals({ residuals: spreads, leverage }: FitQualityDocument): Content {
  return [
    table({
      id: 'residuals-table',
      caption: 'Pearson residuals by site: a mean off zero says that the level is off there',
      columns: ['Site', { number: 'Rows' }, { number: 'Mean' }, { number: 'Standard deviation' }],
      rows: spreads.map(({ site, rows, mean, sd }) => [site, whole(rows), figure(mean, 2), figure(sd)]),
    }),
    leverage.length === 0
      ? null
      : table({
          id: 'leverage-table',
          caption: 'Leverage by site: how much single rows decide',
          columns: [
            'Site',
            { number: 'Mean' },
            { number: 'Largest' },
            { number: 'Rows above twice the mean' },
          ],
          rows: leverage.map(({ site, mean, most, rowsHigh }) => [
            site,
            figure(mean),
            figure(most),
            whole(rowsHigh),
          ]),
        }),
  ];
}
