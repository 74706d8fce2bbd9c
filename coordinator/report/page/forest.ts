import { dot, link, type PlotOptions, ruleX, tickX } from '@observablehq/plot';
import type { ComparisonDocument, Heterogeneity, Interval } from '../../run/result-parts.js';
import { shortened } from '../phrases.js';
import { tick } from './figures.js';
import { roomFor } from './picture.js';

interface Row extends Interval {
  readonly who: string;
  readonly kind: 'own' | 'average' | 'common';
}

/** What the two rows under the sites are called. */
export const AVERAGE = 'average of sites';
export const COMMON = 'common fit';

const isDrawable = ({ estimate, lower, upper }: Interval): boolean =>
  [estimate, lower, upper].every(Number.isFinite);

/** The sites' own estimates of one coefficient, their average and the common fit. */
export function forestRows(
  { name, average }: Heterogeneity,
  { sites }: ComparisonDocument,
  common: Interval | null,
): Row[] {
  const own = sites.flatMap(({ site, own: estimates }): Row[] => {
    const estimate = estimates?.[name];
    return estimate === undefined ? [] : [{ ...estimate, who: site, kind: 'own' }];
  });
  return [
    ...own,
    { ...average, who: AVERAGE, kind: 'average' as const },
    ...(common === null ? [] : [{ ...common, who: COMMON, kind: 'common' as const }]),
  ].filter(isDrawable);
}

/** Circles: sites; bar on end: average; diamond: common fit, with a line down to compare against. */
export function forestPlot(rows: readonly Row[]): PlotOptions {
  const label = (who: string): string => shortened(who, 18);
  const common = rows.find(({ kind }) => kind === 'common');
  const of = (kind: Row['kind']): Row[] => rows.filter((row) => row.kind === kind);
  const colour = ({ kind }: Row): string =>
    kind === 'own' ? 'var(--soft)' : kind === 'average' ? 'var(--third)' : 'var(--mark)';
  const least = Math.min(0, ...rows.map(({ lower }) => lower));
  const most = Math.max(0, ...rows.map(({ upper }) => upper));
  const pad = (most - least || 1) * 0.04;
  return {
    width: 470,
    height: rows.length * 22 + 44,
    marginLeft: roomFor(rows.map(({ who }) => label(who))),
    marginRight: 16,
    marginTop: 8,
    marginBottom: 28,
    x: { domain: [least - pad, most + pad], label: null, tickFormat: tick, tickSize: 4, ticks: 5 },
    y: { domain: rows.map(({ who }) => who), label: null, tickSize: 0, tickFormat: label },
    marks: [
      ruleX([0], { stroke: 'var(--soft)', strokeDasharray: '3,3' }),
      ...(common === undefined
        ? []
        : [ruleX([common.estimate], { stroke: 'var(--mark)', strokeOpacity: 0.45 })]),
      link(rows, { x1: 'lower', x2: 'upper', y1: 'who', y2: 'who', stroke: colour, strokeWidth: 2 }),
      dot(of('own'), {
        x: 'estimate',
        y: 'who',
        r: 4,
        fill: 'var(--paper)',
        stroke: 'var(--ink)',
        strokeWidth: 1.5,
      }),
      tickX(of('average'), { x: 'estimate', y: 'who', stroke: 'var(--third)', strokeWidth: 4, inset: 3 }),
      dot(of('common'), { x: 'estimate', y: 'who', symbol: 'diamond', r: 6, fill: 'var(--mark)' }),
    ],
  };
}
