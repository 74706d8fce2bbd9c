import { dot, line, link, type PlotOptions, ruleX, ruleY, text } from '@observablehq/plot';
import type { FitDocument } from '../../run/result.js';
import type { ChoiceDocument } from '../../run/result-parts.js';
import { counted, shortened } from '../phrases.js';
import { lambdaText } from '../tables.js';
import { figure, tick } from './figures.js';
import type { ReportInput } from './input.js';
import { type Content, html } from './markup.js';
import { type Section, table } from './parts.js';
import { pictureMarkup, roomFor } from './picture.js';

const RULES: Readonly<Record<ChoiceDocument['rule'], string>> = {
  minimum: 'the least mean loss on rows held out',
  'one-standard-error': 'the largest λ within one standard error of the least mean loss on rows held out',
  aic: 'the least Akaike information criterion',
  bic: 'the least Bayesian information criterion',
  'extended-bic': 'the least extended Bayesian information criterion',
};
/** Coefficients drawn along a path, the largest at its far end, and those of them that are named. */
const TRACED_MOST = 80;
const NAMED_MOST = 8;

/** Several fits: how one was chosen, and how the coefficients come in; null where there is one. */
export function pathSection({ result }: ReportInput): Section | null {
  const { fits, choice, chosen } = result;
  if (fits.length < 2) return null;
  const body: Content[] = [];
  if (choice === null) body.push(html`<p>${counted(fits.length, 'fit')}, and none was to be chosen.</p>`);
  else
    body.push(
      html`<p>Of ${counted(fits.length, 'fit')}, fit ${choice.chosen + 1} with λ = ${figure(choice.lambdas[choice.chosen])} and ${counted(choice.nonzero[choice.chosen] ?? 0, 'coefficient')} that ${choice.nonzero[choice.chosen] === 1 ? 'is' : 'are'} not zero was chosen: ${RULES[choice.rule]}.</p>`,
      choicePicture(choice),
    );
  body.push(tracesPicture(fits, chosen), fitsTable(fits, choice));
  return { id: 'path', heading: 'The fits and the choice between them', body };
}

interface Held {
  readonly lambda: number;
  readonly mean: number;
  readonly lower: number;
  readonly upper: number;
}

function held({ lambdas, crossValidation, criterion }: ChoiceDocument): Held[] {
  return lambdas.flatMap((lambda, at) => {
    const mean = crossValidation === null ? criterion?.[at] : crossValidation.mean[at];
    if (mean === null || mean === undefined || !Number.isFinite(mean) || !(lambda > 0)) return [];
    const error = crossValidation?.standardError[at] ?? 0;
    return [{ lambda, mean, lower: mean - error, upper: mean + error }];
  });
}

function choicePicture(choice: ChoiceDocument): Content {
  const points = held(choice);
  if (points.length < 2) return null;
  const folds = choice.crossValidation;
  const what = folds === null ? 'criterion' : 'mean loss on held-out rows';
  const chosen = choice.lambdas[choice.chosen] ?? 0;
  const minimum = choice.lambdas[choice.minimum] ?? 0;
  const bars = folds === null ? '' : ` Bars: one standard error over ${counted(folds.folds.length, 'fold')}.`;
  return pictureMarkup({
    id: 'choice-picture',
    title: `${what.charAt(0).toUpperCase()}${what.slice(1)} by λ`,
    description: `${what} is least at λ = ${figure(minimum)}; λ = ${figure(chosen)} is chosen. The table of fits has the numbers.`,
    caption: `Circles: ${what}.${bars} Vertical lines: the λ chosen (solid, diamond) and the one with the least value (dashed). λ grows to the left, so that models grow to the right.`,
    options: choicePlot(points, chosen, minimum, what),
  });
}

/** λ falls from left to right: the models grow. */
const lambdaAxis = (lambdas: readonly number[]) => {
  const most = Math.max(...lambdas);
  const least = Math.min(...lambdas);
  return {
    type: 'log' as const,
    domain: [most * 1.15, least / 1.15],
    label: 'λ, falling',
    labelArrow: 'none' as const,
    labelAnchor: 'center' as const,
    labelOffset: 38,
    tickSize: 4,
    ticks: 5,
    tickFormat: (value: number) => (/^[125]/.test(String(value).replace(/^0\.0*/, '')) ? tick(value) : ''),
  };
};

function choicePlot(points: readonly Held[], chosen: number, minimum: number, what: string): PlotOptions {
  const at = points.find(({ lambda }) => lambda === chosen);
  const same = chosen === minimum;
  return {
    width: 720,
    height: 320,
    marginLeft: 64,
    marginRight: 24,
    marginTop: 44,
    marginBottom: 44,
    x: lambdaAxis(points.map(({ lambda }) => lambda)),
    y: {
      label: what,
      labelArrow: 'none',
      tickFormat: tick,
      tickSize: 0,
      grid: true,
      nice: true,
      ticks: 6,
      labelOffset: 60,
    },
    marks: [
      ...(same ? [] : [ruleX([minimum], { stroke: 'var(--soft)', strokeDasharray: '4,3' })]),
      ruleX([chosen], { stroke: 'var(--second)', strokeWidth: 1.5 }),
      link(points, {
        x1: 'lambda',
        x2: 'lambda',
        y1: 'lower',
        y2: 'upper',
        stroke: 'var(--mark)',
        strokeWidth: 1.5,
      }),
      dot(points, {
        x: 'lambda',
        y: 'mean',
        r: 3.5,
        fill: 'var(--paper)',
        stroke: 'var(--mark)',
        strokeWidth: 1.5,
      }),
      ...(at === undefined
        ? []
        : [dot([at], { x: 'lambda', y: 'mean', symbol: 'diamond', r: 6, fill: 'var(--second)' })]),
      text([{ lambda: chosen }], {
        x: 'lambda',
        frameAnchor: 'top',
        dy: -16,
        text: () => (same ? 'chosen, and least' : 'chosen'),
        fill: 'var(--second)',
      }),
      ...(same
        ? []
        : [
            text([{ lambda: minimum }], {
              x: 'lambda',
              frameAnchor: 'top',
              dy: -16,
              text: () => 'least',
              fill: 'var(--soft)',
            }),
          ]),
    ],
  };
}

interface Trace {
  readonly name: string;
  readonly lambda: number;
  readonly value: number;
}

function tracesPicture(fits: readonly FitDocument[], chosen: number | null): Content {
  const along = fits.flatMap((fit) =>
    typeof fit.lambda === 'number' && fit.lambda > 0 ? [{ fit, lambda: fit.lambda }] : [],
  );
  if (along.length < 2) return null;
  const end = along.reduce((a, b) => (b.lambda < a.lambda ? b : a)).fit;
  const names = Object.keys(end.coefficients)
    .filter((name) => Number.isFinite(end.coefficients[name]))
    .sort((a, b) => Math.abs(end.coefficients[b] ?? 0) - Math.abs(end.coefficients[a] ?? 0))
    .slice(0, TRACED_MOST);
  const traces = names.flatMap((name): Trace[] =>
    along.flatMap(({ fit, lambda }) => {
      const value = fit.coefficients[name];
      return value === undefined || !Number.isFinite(value) ? [] : [{ name, lambda, value }];
    }),
  );
  const all = Object.keys(end.coefficients).length;
  const mark = chosen === null ? null : (fits[chosen]?.lambda ?? null);
  const some = all > names.length ? ` The ${names.length} largest of ${all} are drawn.` : '';
  return pictureMarkup({
    id: 'traces-picture',
    title: 'Coefficients by λ',
    description: `${counted(names.length, 'coefficient')}, each a line over ${counted(along.length, 'value')} of λ, growing from zero as λ falls. The coefficients of every fit are in coefficients.csv.`,
    caption: `A line for each coefficient, in units of the linear predictor; the ${Math.min(NAMED_MOST, names.length)} largest at the right end are named there.${some} Vertical line: the λ chosen.`,
    options: tracesPlot(traces, names, typeof mark === 'number' ? mark : null),
  });
}

function tracesPlot(traces: readonly Trace[], names: readonly string[], chosen: number | null): PlotOptions {
  const lambdas = traces.map(({ lambda }) => lambda);
  const least = Math.min(...lambdas);
  const ends = traces.filter(({ name, lambda }) => lambda === least && names.indexOf(name) < NAMED_MOST);
  const height = 340;
  const values = traces.map(({ value }) => value);
  const labels = spread(ends, (Math.max(...values) - Math.min(...values)) / (height / 17));
  const short = (name: string): string => shortened(name, 22);
  return {
    width: 720,
    height,
    marginLeft: 64,
    marginRight: roomFor(ends.map(({ name }) => short(name))),
    marginTop: 28,
    marginBottom: 44,
    x: lambdaAxis(lambdas),
    y: { label: 'coefficient', labelArrow: 'none', tickFormat: tick, tickSize: 0, ticks: 6, labelOffset: 60 },
    marks: [
      ruleY([0], { stroke: 'var(--soft)', strokeDasharray: '3,3' }),
      ...(chosen === null ? [] : [ruleX([chosen], { stroke: 'var(--second)', strokeWidth: 1.5 })]),
      line(traces, { x: 'lambda', y: 'value', z: 'name', stroke: 'var(--mark)', strokeWidth: 1.2 }),
      text(labels, {
        x: 'lambda',
        y: 'value',
        text: ({ name }: Trace) => short(name),
        dx: 12,
        textAnchor: 'start',
      }),
    ],
  };
}

/** Labels moved up where they would lie on each other. */
function spread(ends: readonly Trace[], step: number): Trace[] {
  const sorted = [...ends].sort((a, b) => a.value - b.value);
  let before = Number.NEGATIVE_INFINITY;
  return sorted.map((one) => {
    before = Math.max(one.value, before + step);
    return { ...one, value: before };
  });
}

function fitsTable(fits: readonly FitDocument[], choice: ChoiceDocument | null): Content {
  const folds = choice?.crossValidation ?? null;
  return table({
    id: 'fits-table',
    caption: 'The fits',
    folded: fits.length > 8,
    columns: [
      'Fit',
      { number: 'λ' },
      { number: 'Not zero' },
      { number: 'Objective' },
      { number: 'Deviance' },
      ...(choice === null
        ? []
        : folds === null
          ? [{ number: 'Criterion' }]
          : [{ number: 'Held-out loss' }, { number: 'Its standard error' }]),
      'Ended',
    ],
    rows: fits.map((fit, at) => [
      `${at + 1}${choice?.chosen === at ? ' (chosen)' : ''}${choice?.minimum === at && choice.chosen !== at ? ' (least)' : ''}`,
      typeof fit.lambda === 'number' ? figure(fit.lambda) : lambdaText(fit.lambda),
      choice?.nonzero[at] ?? Object.values(fit.coefficients).filter((value) => value !== 0).length,
      figure(fit.objective, 6),
      figure(fit.deviance, 6),
      ...(choice === null
        ? []
        : folds === null
          ? [figure(choice.criterion?.[at], 6)]
          : [figure(folds.mean[at], 5), figure(folds.standardError[at])]),
      fit.outcome,
    ]),
  });
}
