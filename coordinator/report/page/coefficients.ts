import type { InferenceDocument } from '../../run/result-parts.js';
import { counted, listed } from '../phrases.js';
import { coefficientsOf } from '../tables.js';
import { panels, type Reach, reachPlot } from './coefficient-picture.js';
import { figure, percent, pValue, ratioFigures, reach, whole } from './figures.js';
import { fitStoodBy, type ReportInput, ratioName } from './input.js';
import { type Content, html } from './markup.js';
import { paragraphs, type Section, table } from './parts.js';
import { pictureMarkup } from './picture.js';

/** Coefficients in the picture: the largest in standard errors. The table has them all. */
const DRAWN_MOST = 60;

const COVARIANCE_WORDS: Readonly<Record<InferenceDocument['used'], string>> = {
  model: 'the model itself (inverse information times the dispersion)',
  hc0: 'the sandwich HC0, which does not trust the model’s variance (Huber 1967; White 1980)',
  hc1: 'the sandwich HC1, which does not trust the model’s variance (Huber 1967; White 1980)',
  cluster: 'the sandwich clustered within sites (Liang and Zeger 1986)',
  'cluster-g1':
    'the sandwich clustered within sites, corrected for the number of clusters (Liang and Zeger 1986)',
  site: 'the sandwich clustered by site',
  'site-g1': 'the sandwich clustered by site, corrected for the number of sites',
};

/** The coefficients of the fit stood by, with their intervals where there are any. */
export function coefficientsSection(input: ReportInput): Section {
  const { result } = input;
  const fit = fitStoodBy(result);
  const { inference } = result;
  const tested = inference !== null && inference.coefficients.length > 0;
  const debiased = inference !== null && inference.debiased.length > 0;
  const body: Content[] = [];
  if (fit === null)
    body.push(html`<p>The run stands by no single fit; the fits are in <code>coefficients.csv</code>.</p>`);
  else {
    if (fit.lambda !== null)
      body.push(
        html`<p>Of the fit with λ = ${(typeof fit.lambda === 'number' ? [fit.lambda] : fit.lambda).map((one) => figure(one)).join(', ')}.</p>`,
      );
    if (tested) body.push(testedMarkup(input, inference));
    else body.push(plainTable(input, fit));
    if (debiased) body.push(debiasedMarkup(input, inference));
    if (fit.dropped.length > 0)
      body.push(
        html`<p>No coefficient, as the column has no spread at any site: ${listed(fit.dropped, 20)}.</p>`,
      );
    body.push(
      html`<p>Objective ${figure(fit.objective, 6)} = mean loss ${figure(fit.loss, 6)} + penalty ${figure(fit.penalty, 6)}; deviance ${figure(fit.deviance, 6)}.</p>`,
    );
  }
  return { id: 'coefficients', heading: 'Coefficients', body };
}

const ratiosOf = ({ lower, estimate, upper }: Reach): [string, string] =>
  ratioFigures(Math.exp(lower), Math.exp(estimate), Math.exp(upper));

const ratioHead = (ratio: string): string => ratio.charAt(0).toUpperCase() + ratio.slice(1);

function testedMarkup(input: ReportInput, inference: InferenceDocument): Content {
  const ratio = ratioName(input.specification);
  const level = percent(inference.level);
  const { degreesOfFreedom, dispersion, used } = inference;
  const reference =
    degreesOfFreedom === null
      ? 'the normal distribution'
      : `Student’s t, ${whole(degreesOfFreedom)} degrees of freedom`;
  const profiles = new Map(inference.profile.map((one) => [one.name, one]));
  const rows = inference.coefficients.map((one) => [
    one.name,
    figure(one.estimate, 4),
    reach(one.lower, one.upper),
    ...(ratio === null ? [] : one.name === '(intercept)' ? ['', ''] : ratiosOf(one)),
    figure(one.standardError),
    figure(one.statistic),
    pValue(one.pValue),
    one.pHolm === null ? '' : pValue(one.pHolm),
    one.pBenjaminiHochberg === null ? '' : pValue(one.pBenjaminiHochberg),
  ]);
  return [
    html`<p>Intervals of ${level} (Wald) rest on ${COVARIANCE_WORDS[used]} and ${reference}; dispersion ${figure(dispersion.value)} (${dispersion.kind}). p-values are given as they are, and adjusted over all coefficients but the intercept: Holm (1979) for any error among them, Benjamini and Hochberg (1995, B–H) for the share of false ones.</p>`,
    pictures('coefficients', inference.coefficients, level, ratio),
    table({
      id: 'coefficients-table',
      caption: `Coefficients with intervals of ${level}`,
      columns: [
        'Coefficient',
        { number: 'Estimate' },
        { number: 'Interval' },
        ...(ratio === null ? [] : [{ number: ratioHead(ratio) }, { number: 'Its interval' }]),
        { number: 'Standard error' },
        { number: degreesOfFreedom === null ? 'z' : 't' },
        { number: 'p' },
        { number: 'p (Holm)' },
        { number: 'p (B–H)' },
      ],
      rows,
    }),
    profiles.size === 0
      ? null
      : table({
          id: 'profile-table',
          caption: `Profile-likelihood intervals of ${level}`,
          columns: ['Coefficient', { number: 'Lower' }, { number: 'Upper' }],
          rows: inference.profile.map(({ name, lower, upper }) => [name, figure(lower), figure(upper)]),
        }),
  ];
}

interface Tested extends Reach {
  readonly statistic?: number;
  readonly standardError: number;
}

/** The intercept is left out: it would stretch the axis and answers no question. */
function pictures(id: string, all: readonly Tested[], level: string, ratio: string | null): Content {
  const finite = all.filter(
    ({ name, estimate, lower, upper }) =>
      name !== '(intercept)' && [estimate, lower, upper].every(Number.isFinite),
  );
  const size = ({ statistic, estimate, standardError }: Tested): number =>
    Math.abs(statistic ?? (standardError > 0 ? estimate / standardError : 0));
  const kept = new Set([...finite].sort((a, b) => size(b) - size(a)).slice(0, DRAWN_MOST));
  const drawn = finite.filter((one) => kept.has(one));
  if (drawn.length === 0) return null;
  const pages = panels(drawn);
  const some =
    finite.length > drawn.length
      ? `The ${whole(drawn.length)} of ${whole(finite.length)} coefficients that are largest in standard errors; the table has them all. `
      : '';
  const parted =
    pages.length > 1 ? 'Each picture has an axis of its own, as the coefficients differ much in size. ' : '';
  const twice = ratio === null ? '' : ` The upper axis reads it as a ${ratio}: exp of the coefficient.`;
  const key = `${some}${parted}Diamond: estimate. Bar: ${level} interval. Dashed line: no association.${twice}`;
  return pages.map((rows, at) => {
    const clear = rows.filter(({ lower, upper }) => lower > 0 || upper < 0).length;
    return pictureMarkup({
      id: `${id}-picture-${at + 1}`,
      title: pages.length === 1 ? 'Coefficients' : `Coefficients, picture ${at + 1} of ${pages.length}`,
      description: `${counted(rows.length, 'coefficient')}, each a diamond at the estimate on a bar over its ${level} interval; a dashed line stands at zero. ${counted(clear, 'interval')} ${clear === 1 ? 'does' : 'do'} not reach zero. The table below has the numbers.`,
      caption: at === 0 ? key : 'As above, on an axis of its own.',
      options: reachPlot(rows, 'coefficient, in units of the linear predictor', ratio),
    });
  });
}

function plainTable(
  { specification }: ReportInput,
  fit: NonNullable<ReturnType<typeof fitStoodBy>>,
): Content {
  const ratio = ratioName(specification);
  return table({
    id: 'coefficients-table',
    caption: 'Coefficients, without intervals',
    columns: [
      'Coefficient',
      { number: 'Estimate' },
      ...(ratio === null ? [] : [{ number: ratioHead(ratio) }]),
    ],
    rows: coefficientsOf(fit).map(([name, value], at) => [
      at === 0 && fit.intercept !== null ? '(intercept)' : name,
      figure(value, 4),
      ...(ratio === null ? [] : [at === 0 && fit.intercept !== null ? '' : figure(Math.exp(value))]),
    ]),
  });
}

function debiasedMarkup({ specification }: ReportInput, inference: InferenceDocument): Content {
  const level = percent(inference.level);
  const ratio = ratioName(specification);
  return [
    html`<h3>De-biased estimates</h3>`,
    paragraphs([
      'A penalty pulls coefficients towards zero. These estimates take the pull back by one step, and their intervals hold for them, not for the shrunk coefficients above.',
    ]),
    pictures('debiased', inference.debiased, level, ratio),
    table({
      id: 'debiased-table',
      caption: `De-biased estimates with intervals of ${level}`,
      columns: [
        'Coefficient',
        { number: 'Estimate' },
        { number: 'Interval' },
        ...(ratio === null ? [] : [{ number: ratioHead(ratio) }, { number: 'Its interval' }]),
        { number: 'Standard error' },
        { number: 'p' },
      ],
      rows: inference.debiased.map((one) => [
        one.name,
        figure(one.estimate, 4),
        reach(one.lower, one.upper),
        ...(ratio === null ? [] : ratiosOf(one)),
        figure(one.standardError),
        pValue(one.pValue),
      ]),
    }),
  ];
}
