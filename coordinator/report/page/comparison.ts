import type { ComparisonDocument, Heterogeneity, Interval } from '../../run/result-parts.js';
import { counted } from '../phrases.js';
import { figure, percent, pInWords, pValue, reach, whole } from './figures.js';
import { forestPlot, forestRows } from './forest.js';
import type { ReportInput } from './input.js';
import { type Content, coded, html } from './markup.js';
import { paragraphs, type Section, subheading, table } from './parts.js';
import { svg } from './picture.js';

/** Coefficients with a picture of their own: those in which the sites differ most. */
const DRAWN_MOST = 12;
/** Cells of the table of changes; past that, only the coefficients that move most. */
const CHANGES_MOST = 40;

/** Whether the sites share one model; null where it was not compared. */
export function comparisonSection(input: ReportInput): Section | null {
  const { comparison } = input.result;
  if (comparison === null) return null;
  return {
    id: 'comparison',
    heading: 'Do the sites share one model?',
    body: [
      paragraphs(comparison.words.map(coded)),
      commonModel(comparison),
      forests(input, comparison),
      heterogeneityTable(comparison),
      ownTable(comparison),
      changes(comparison),
      sitesTable(comparison),
    ],
  };
}

function commonModel({ commonModel: test }: ComparisonDocument): Content {
  if (test === null) return null;
  return html`<p>Likelihood-ratio test of one common model against a model per site: χ² = ${figure(test.statistic)} on ${test.degreesOfFreedom} degrees of freedom, ${pInWords(test.pValue)}.</p>`;
}

function forests({ result }: ReportInput, comparison: ComparisonDocument): Content {
  const { inference } = result;
  const common = new Map<string, Interval>(
    [...(inference?.debiased ?? []), ...(inference?.coefficients ?? [])].map((one) => [one.name, one]),
  );
  const apart = [...comparison.heterogeneity].sort((a, b) => a.pValue - b.pValue);
  const kept = new Set(apart.slice(0, DRAWN_MOST));
  const drawn = comparison.heterogeneity.filter((one) => kept.has(one));
  if (drawn.length === 0) return null;
  const some =
    comparison.heterogeneity.length > drawn.length
      ? ` The ${drawn.length} of ${whole(comparison.heterogeneity.length)} coefficients in which the sites differ most are drawn.`
      : '';
  return [
    subheading('Each site beside the common fit'),
    html`<p class="caption">Circle: the site’s own estimate with its interval. Upright bar: average of the sites’ estimates, weighted by their inverse variances. Diamond and thin line: common fit. Dashed line: zero.${some}</p>`,
    html`<div class="forests">${drawn.map((one, at) => forest(one, comparison, common.get(one.name) ?? null, at))}</div>\n`,
  ];
}

function forest(
  one: Heterogeneity,
  comparison: ComparisonDocument,
  common: Interval | null,
  at: number,
): Content {
  const rows = forestRows(one, comparison, common);
  if (rows.length === 0) return null;
  const drawing = svg({
    id: `forest-${at + 1}`,
    title: `${one.name} at each site`,
    description: rows
      .map(({ who, estimate, lower, upper }) => `${who}: ${figure(estimate)} (${reach(lower, upper)})`)
      .join('; '),
    options: forestPlot(rows),
  });
  return html`<figure><h4>${one.name}</h4>${drawing}<figcaption>I² ${percent(one.i2)}, ${pInWords(one.pValue)}</figcaption></figure>\n`;
}

const heterogeneityTable = ({ heterogeneity }: ComparisonDocument): Content => [
  subheading('How far the sites differ'),
  html`<p>Q: Cochran (1954). I²: share of the variation between sites that chance does not explain (Higgins and Thompson 2002). τ²: variance between sites (DerSimonian and Laird 1986). The average of the sites’ own fits is what is usually reported where rows cannot move; the last column says how far it lies from the common fit.</p>`,
  table({
    id: 'heterogeneity-table',
    caption: 'Differences between sites, by coefficient',
    columns: [
      'Coefficient',
      { number: 'Sites' },
      { number: 'Q' },
      { number: 'p' },
      { number: 'I²' },
      { number: 'τ²' },
      { number: 'Average of sites' },
      { number: 'Its interval' },
      { number: 'Average less common fit' },
    ],
    rows: heterogeneity.map((one) => [
      one.name,
      one.sites,
      figure(one.q),
      pValue(one.pValue),
      percent(one.i2),
      figure(one.tau2),
      figure(one.average.estimate),
      reach(one.average.lower, one.average.upper),
      figure(one.averageMinusCommon, 2),
    ]),
  }),
];

function ownTable({ sites, heterogeneity }: ComparisonDocument): Content {
  const fitted = sites.filter(({ own }) => own !== null);
  if (fitted.length === 0) return null;
  return table({
    id: 'own-table',
    dense: true,
    caption: 'The sites’ own estimates with intervals',
    folded: true,
    columns: ['Coefficient', ...fitted.map(({ site }) => ({ number: site }))],
    rows: heterogeneity.map(({ name }) => [
      name,
      ...fitted.map(({ own }) => {
        const one = own?.[name];
        return one === undefined ? '' : `${figure(one.estimate)} (${reach(one.lower, one.upper)})`;
      }),
    ]),
  });
}

function changes({ sites }: ComparisonDocument): Content {
  const left = sites.filter((one) => one.leftOut !== null);
  if (left.length === 0) return null;
  const names = [...new Set(left.flatMap(({ leftOut }) => Object.keys(leftOut ?? {})))];
  const most = (name: string): number =>
    Math.max(0, ...left.map(({ leftOut }) => Math.abs(leftOut?.[name]?.changeInStandardErrors ?? 0)));
  const kept = new Set([...names].sort((a, b) => most(b) - most(a)).slice(0, CHANGES_MOST));
  const shown = names.filter((name) => kept.has(name));
  const some =
    names.length > shown.length ? `: the ${shown.length} of ${whole(names.length)} that move most` : '';
  return [
    subheading('Without each site'),
    table({
      id: 'changes-table',
      dense: true,
      caption: `Change of the common fit without the site, and in its standard errors${some}`,
      columns: ['Coefficient', ...left.map(({ site }) => ({ number: `Without ${site}` }))],
      rows: shown.map((name) => [
        name,
        ...left.map(({ leftOut }) => {
          const one = leftOut?.[name];
          if (one === undefined) return '';
          const change = `${one.change > 0 ? '+' : ''}${figure(one.change, 2)}`;
          return one.changeInStandardErrors === null
            ? change
            : `${change} (${figure(Math.abs(one.changeInStandardErrors), 2)} s.e.)`;
        }),
      ]),
    }),
  ];
}

function sitesTable({ sites }: ComparisonDocument): Content {
  const reasons = sites.filter(({ reason }) => reason !== null);
  const mean = (shares: Readonly<Record<string, number>>): number | null => {
    const values = Object.values(shares);
    return values.length === 0 ? null : values.reduce((sum, value) => sum + value, 0) / values.length;
  };
  return [
    subheading('What each site adds'),
    table({
      id: 'shares-table',
      caption: 'Deviance of each site under the common fit and its own, and its share of the information',
      columns: [
        'Site',
        { number: 'Rows' },
        { number: 'Deviance, common fit' },
        { number: 'Deviance, own fit' },
        { number: 'Information, mean over coefficients' },
        'Largest share',
      ],
      rows: sites.map((one) => {
        const top = Object.entries(one.informationShare).sort(([, a], [, b]) => b - a)[0];
        return [
          one.site,
          whole(one.rowsUsed),
          figure(one.devianceCommon, 5),
          figure(one.devianceOwn, 5),
          percent(mean(one.informationShare)),
          top === undefined ? '' : `${percent(top[1])} of ${top[0]}`,
        ];
      }),
    }),
    reasons.length === 0
      ? null
      : html`<p>${counted(reasons.length, 'site')} without a fit of its own: ${reasons.map(({ site, reason }) => `${site} (${reason})`).join('; ')}.</p>`,
  ];
}
