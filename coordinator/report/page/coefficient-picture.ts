import { axisX, dot, link, type PlotOptions, ruleX } from '@observablehq/plot';
import { shortened } from '../phrases.js';
import { tick } from './figures.js';
import { roomFor } from './picture.js';

/** A point with its interval. */
export interface Reach {
  readonly name: string;
  readonly estimate: number;
  readonly lower: number;
  readonly upper: number;
}

/** Rows of one picture: as many as fit on a page of paper. */
const ROWS_MOST = 30;
const PANELS_MOST = 4;
/** A row whose reach is this much smaller than the largest of its picture could not be read there. */
const SPAN = 12;
const NAME_LETTERS = 30;
const ROW_HEIGHT = 24;
/** Round ratios, the roundest first: later ones are marked only where there is room. */
const RATIO_TICKS = [
  1, 2, 0.5, 5, 0.2, 10, 0.1, 1.5, 3, 0.7, 0.3, 20, 0.05, 50, 0.02, 100, 0.01, 1.2, 0.8, 1.1, 0.9, 1.05, 0.95,
];
/** Share of the axis between two marks. */
const TICKS_APART = 0.075;

const extent = ({ lower, upper }: Reach): number => Math.max(Math.abs(lower), Math.abs(upper));

/** Rows parted by the size of their reach, so that each can be read on its axis; the order within is kept. */
export function panels(rows: readonly Reach[]): Reach[][] {
  const bySize = [...rows].sort((a, b) => extent(b) - extent(a));
  const groups: Reach[][] = [];
  for (const row of bySize) {
    const group = groups.at(-1);
    const largest = group?.[0];
    const apart = largest === undefined || extent(row) * SPAN < extent(largest);
    if (group === undefined || (apart && groups.length < PANELS_MOST)) groups.push([row]);
    else group.push(row);
  }
  return groups
    .map((group) => rows.filter((row) => group.includes(row)))
    .flatMap((group) =>
      Array.from({ length: Math.ceil(group.length / ROWS_MOST) }, (_, page) =>
        group.slice(page * ROWS_MOST, (page + 1) * ROWS_MOST),
      ),
    );
}

/** Points with intervals, one row each; with `ratio`, exp of the axis along the top. */
export function reachPlot(rows: readonly Reach[], label: string, ratio: string | null): PlotOptions {
  const names = rows.map(({ name }) => name);
  const left = Math.min(0, ...rows.map(({ lower }) => lower));
  const right = Math.max(0, ...rows.map(({ upper }) => upper));
  const pad = (right - left || 1) * 0.04;
  const ticks = ratio === null ? [] : ratioTicks(left - pad, right + pad);
  const labels = names.map((name) => shortened(name, NAME_LETTERS));
  return {
    width: 720,
    height: rows.length * ROW_HEIGHT + 60 + (ticks.length > 0 ? 36 : 0),
    marginLeft: roomFor(labels),
    marginRight: 24,
    marginBottom: 44,
    marginTop: ticks.length > 0 ? 48 : 12,
    x: { domain: [left - pad, right + pad] },
    y: {
      domain: names,
      label: null,
      tickSize: 0,
      tickFormat: (name: string) => shortened(name, NAME_LETTERS),
    },
    marks: [
      axisX({ label, ...AXIS, ticks: 7, tickFormat: tick, labelOffset: 38 }),
      ...(ratio === null || ticks.length === 0
        ? []
        : [axisX(ticks, { anchor: 'top', label: ratio, ...AXIS, tickFormat: ratioText, labelOffset: 36 })]),
      ruleX([0], { stroke: 'var(--soft)', strokeDasharray: '3,3' }),
      link(rows, {
        x1: 'lower',
        x2: 'upper',
        y1: 'name',
        y2: 'name',
        stroke: 'var(--mark)',
        strokeWidth: 2.5,
        strokeLinecap: 'butt',
      }),
      dot(rows, {
        x: 'estimate',
        y: 'name',
        fill: 'var(--mark)',
        stroke: 'var(--paper)',
        strokeWidth: 1,
        symbol: 'diamond',
        r: 5.5,
      }),
    ],
  };
}

const AXIS = { labelArrow: 'none', labelAnchor: 'center', tickSize: 4 } as const;

const ratioText = (logarithm: number): string => tick(Number(Math.exp(logarithm).toPrecision(6)));

function ratioTicks(from: number, to: number): number[] {
  const apart = (to - from) * TICKS_APART;
  const marked = within(RATIO_TICKS, from, to, apart);
  if (marked.length >= 3) return marked;
  // A narrow reach: plain steps of the ratio itself.
  const width = Math.exp(to) - Math.exp(from);
  const coarse = 10 ** Math.floor(Math.log10(width / 3));
  const step = [1, 2, 5].map((factor) => factor * coarse).find((size) => width / size <= 9) ?? 10 * coarse;
  const first = Math.ceil(Math.exp(from) / step);
  const steps = Array.from({ length: 12 }, (_, at) => Number(((first + at) * step).toPrecision(6)));
  return within(steps, from, to, apart);
}

/** Logarithms of those ratios that lie on the axis, each with room around it. */
function within(ratios: readonly number[], from: number, to: number, apart: number): number[] {
  const marked: number[] = [];
  for (const ratio of ratios) {
    const at = Math.log(ratio);
    if (at >= from && at <= to && marked.every((other) => Math.abs(other - at) >= apart)) marked.push(at);
  }
  return marked;
}
