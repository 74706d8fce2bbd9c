import { dot, line, type PlotOptions, ruleY, text } from '@observablehq/plot';
import type { LogEvent, RoundEvent } from '../../run/log-event.js';
import { counted, duration, listed, roughly, sentence } from '../phrases.js';
import { tick, whole } from './figures.js';
import { type ReportInput, roundsOf } from './input.js';
import { type Content, html } from './markup.js';
import { list, type Section, table } from './parts.js';
import { pictureMarkup } from './picture.js';

/** Rounds in the table; past that, its head and its tail. */
const ROUNDS_MOST = 60;
/** Points with full-sized marks. */
const DIAMONDS_MOST = 60;
/** A gap of zero has no logarithm: it is drawn here, below what doubles can tell apart. */
const GAP_LEAST = 1e-17;

/** How the rounds came to the optimum, and who was waited for. */
export function convergenceSection(input: ReportInput): Section {
  const { result, events } = input;
  const rounds = roundsOf(events);
  const rung = result.rung === null ? '' : `, on the rung ${result.rung}`;
  const reason = result.rungReason === null ? '' : ` ${sentence(`Why this rung: ${result.rungReason}`)}`;
  const body: Content[] = [
    html`<p>It took ${counted(result.rounds, 'round')} after the survey${rung}.${reason}</p>`,
    list(interruptions(events)),
  ];
  if (rounds.length === 0) body.push(html`<p>The round log has no rounds.</p>`);
  else body.push(gapPicture(rounds), roundsTable(rounds), slowTable(rounds));
  return { id: 'convergence', heading: 'How it got there', body };
}

function interruptions(events: readonly LogEvent[]): string[] {
  return events.flatMap((event) => {
    if (event.event === 'without')
      return [
        `After round ${event.round} the fit began again without ${listed(event.sites.map(({ site }) => site))}, waited for ${duration(event.waitedMs)}. What follows is the fit that began then.`,
      ];
    if (event.event === 'resumed')
      return [
        `The coordinator was started again and took the run up at round ${event.round}, from its journal.`,
      ];
    return [];
  });
}

interface Point {
  readonly round: number;
  readonly gap: number;
  readonly measured: boolean;
}

function gapPicture(rounds: readonly RoundEvent[]): Content {
  const solving = rounds.filter(({ stage }) => stage === 'solve');
  const points = solving.flatMap(({ round, relativeGap, gapMeasured }): Point[] =>
    relativeGap === null || !Number.isFinite(relativeGap) || relativeGap < 0
      ? []
      : [{ round, gap: Math.max(relativeGap, GAP_LEAST), measured: gapMeasured }],
  );
  const tolerance = rounds.at(-1)?.tolerance ?? 1e-8;
  if (points.length === 0) return html`<p>No round told how far it was from the optimum.</p>`;
  const last = points.at(-1);
  const within = points.find(({ gap }) => gap <= tolerance);
  return pictureMarkup({
    id: 'gap-picture',
    title: 'Distance to the optimum, by round',
    description: `The relative distance falls to ${roughly(last?.gap ?? 0)} in round ${last?.round ?? 0}; the tolerance ${tolerance} is ${within === undefined ? 'not reached' : `first reached in round ${within.round}`}. The table has the numbers.`,
    caption:
      'Filled diamond: measured. Hollow diamond: guessed from the iteration. Solid line: the tolerance.',
    options: gapPlot(points, tolerance, solving.at(-1)?.round ?? 1),
  });
}

function gapPlot(points: readonly Point[], tolerance: number, lastRound: number): PlotOptions {
  const gaps = points.map(({ gap }) => gap);
  const low = Math.min(tolerance, ...gaps) / 3;
  const high = Math.max(1, ...gaps) * 2;
  const decades = Math.log10(high / low);
  const step = Math.max(1, Math.ceil(decades / 8));
  const first = Math.ceil(Math.log10(low) / step) * step;
  const ticks = Array.from(
    { length: Math.floor((Math.log10(high) - first) / step) + 1 },
    (_, at) => 10 ** (first + at * step),
  );
  const every = Math.max(1, Math.ceil(lastRound / 14));
  const rounds = Array.from({ length: Math.floor(lastRound / every) + 1 }, (_, at) => at * every).filter(
    (at) => at > 0,
  );
  return {
    width: 720,
    height: 300,
    marginLeft: 64,
    marginRight: 84,
    marginBottom: 44,
    marginTop: 28,
    x: {
      domain: [0.5, Math.max(2, lastRound) + 0.5],
      ticks: rounds,
      label: 'round',
      labelArrow: 'none',
      labelAnchor: 'center',
      labelOffset: 38,
      tickSize: 4,
      tickFormat: tick,
    },
    y: {
      type: 'log',
      domain: [low, high],
      ticks,
      tickFormat: power,
      label: 'relative distance to the optimum',
      labelArrow: 'none',
      tickSize: 0,
      grid: true,
    },
    marks: [
      ruleY([tolerance], { stroke: 'var(--second)', strokeWidth: 2 }),
      text([{ round: Math.max(2, lastRound) + 0.5, gap: tolerance }], {
        x: 'round',
        y: 'gap',
        text: () => 'tolerance',
        dx: 6,
        textAnchor: 'start',
        fill: 'var(--second)',
      }),
      line(points, { x: 'round', y: 'gap', stroke: 'var(--mark)', strokeWidth: 1.5 }),
      dot(points, {
        x: 'round',
        y: 'gap',
        symbol: 'diamond',
        r: points.length > DIAMONDS_MOST ? 2 : 5.5,
        fill: (one: Point) => (one.measured ? 'var(--mark)' : 'var(--paper)'),
        stroke: 'var(--mark)',
        strokeWidth: 1.5,
      }),
    ],
  };
}

const power = (value: number): string => (value === 1 ? '1' : tick(value));

function roundsTable(rounds: readonly RoundEvent[]): Content {
  const half = ROUNDS_MOST / 2;
  const shown = rounds.length > ROUNDS_MOST ? [...rounds.slice(0, half), ...rounds.slice(-half)] : rounds;
  const part =
    rounds.length > ROUNDS_MOST
      ? `: the first ${half} and the last ${half} of ${whole(rounds.length)}; rounds.csv has all`
      : '';
  return table({
    id: 'rounds-table',
    caption: `Rounds${part}`,
    folded: true,
    columns: [
      'Round',
      'For',
      { number: 'Relative distance' },
      'Measured',
      { number: 'Took' },
      'Last to answer',
      { number: 'Numbers sent by sites' },
    ],
    rows: shown.map((one) => [
      one.round,
      one.purpose,
      one.relativeGap === null ? '' : roughly(one.relativeGap),
      one.relativeGap === null ? '' : one.gapMeasured ? 'yes' : 'guessed',
      duration(one.tookMs),
      one.slowest === null ? '' : `${one.slowest.site}, ${duration(one.slowest.ms)}`,
      whole(one.numbersUp),
    ]),
  });
}

function slowTable(rounds: readonly RoundEvent[]): Content {
  const sites = new Map<string, { last: number; longestMs: number; stoodIn: number }>();
  const of = (site: string) => {
    const known = sites.get(site) ?? { last: 0, longestMs: 0, stoodIn: 0 };
    sites.set(site, known);
    return known;
  };
  for (const { slowest, standIns } of rounds) {
    if (slowest !== null) {
      const own = of(slowest.site);
      own.last += 1;
      own.longestMs = Math.max(own.longestMs, slowest.ms);
    }
    for (const { site } of standIns) of(site).stoodIn += 1;
  }
  if (sites.size === 0) return null;
  const rows = [...sites].sort(([a, one], [b, two]) => two.last - one.last || (a < b ? -1 : 1));
  const late = rows.some(([, { stoodIn }]) => stoodIn > 0);
  return [
    table({
      id: 'slow-table',
      caption: 'Who was waited for',
      columns: [
        'Site',
        { number: 'Rounds it answered last' },
        { number: 'Longest of those' },
        { number: 'Rounds an older answer stood in' },
      ],
      rows: rows.map(([site, { last, longestMs, stoodIn }]) => [
        site,
        last,
        last === 0 ? '' : duration(longestMs),
        stoodIn,
      ]),
    }),
    late
      ? html`<p>Where an older answer stood in for one that was due, the iteration went on with it; the certificate rests on answers of all sites at one point.</p>`
      : null,
  ];
}
