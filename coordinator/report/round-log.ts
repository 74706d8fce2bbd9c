import type { LogEvent, RoundEvent } from '../run/log-event.js';
import { certificateText, OUTCOME_HEAD } from './outcome-text.js';
import { counted, duration, grouped, listed, sentence, shortened, wrapped } from './phrases.js';
import { namesWithin, Presence } from './presence.js';
import { bar, barWidth, MARKS, roundSentence } from './round-line.js';
import { StandInTeller, withoutLines } from './stand-in-text.js';
import { timeLeftMs } from './time-left.js';

/** The round log of one run for a terminal: each event as lines that read as sentences. */
export interface RoundLog {
  linesFor(event: LogEvent): string[];
}

export interface RoundLogOptions {
  /** Columns of the terminal; at least 40 are used. */
  readonly width: number;
  readonly colour: boolean;
  /** Whether the coordinator goes on after the run, so that its folder and `commonfit result` are of use. */
  readonly served: boolean;
}

const WIDTH_LEAST = 40;
/** Rounds remembered for the estimate of the time left. */
const REMEMBERED = 16;

type Tone = 'good' | 'bad' | 'faint' | 'mark';
const TONES: Readonly<Record<Tone, readonly [string, string]>> = {
  good: ['\u001b[1;32m', '\u001b[0m'],
  bad: ['\u001b[1;33m', '\u001b[0m'],
  faint: ['\u001b[2m', '\u001b[0m'],
  mark: ['\u001b[36m', '\u001b[0m'],
};

/** Keeps what a later sentence needs of earlier events: the run, its title, its rows, the recent rounds. */
export function roundLog(options: RoundLogOptions): RoundLog {
  const width = Math.max(WIDTH_LEAST, Math.floor(options.width));
  const paint = (tone: Tone, text: string): string =>
    options.colour && text !== '' ? `${TONES[tone][0]}${text}${TONES[tone][1]}` : text;
  const memory: Memory = {
    presence: new Presence(width),
    standIns: new StandInTeller(width),
    served: options.served,
    run: null,
    title: null,
    rows: null,
    siteCount: null,
    tolerance: null,
    recent: [],
  };
  return {
    linesFor: (event) => {
      remember(memory, event);
      return linesOf(event, memory, width, paint);
    },
  };
}

interface Memory {
  readonly presence: Presence;
  readonly standIns: StandInTeller;
  readonly served: boolean;
  run: string | null;
  title: string | null;
  rows: number | null;
  siteCount: number | null;
  tolerance: number | null;
  recent: RoundEvent[];
}
type Paint = (tone: Tone, text: string) => string;

function remember(memory: Memory, event: LogEvent): void {
  if (event.event === 'accepted') {
    memory.run = event.run;
    memory.title = event.title;
  } else if (event.event === 'survey') {
    memory.rows = event.rowsTotal;
    memory.siteCount = event.sites.length;
  } else if (event.event === 'round') {
    memory.tolerance = event.tolerance;
    memory.recent = [...memory.recent.slice(1 - REMEMBERED), event];
  } else if (event.event === 'without') {
    memory.rows = null;
    memory.siteCount = null;
    memory.recent = [];
  } else if (event.event === 'resumed') {
    memory.presence.forget();
  }
}

function linesOf(event: LogEvent, memory: Memory, width: number, paint: Paint): string[] {
  switch (event.event) {
    case 'accepted':
      return acceptedLines(event, width);
    case 'waiting':
      return memory.presence.waiting(event);
    case 'site':
      if (event.change === 'connected') return [memory.presence.arrived(event.site)];
      return [paint('bad', memory.presence.lost(event.site))];
    case 'survey':
      return surveyLines(event, width, paint);
    case 'round':
      return [roundLine(event, memory, width, paint), ...memory.standIns.linesFor(event)];
    case 'without':
      return withoutLines(event, width).map((line) => paint('bad', line));
    case 'late':
      return memory.presence.stillOut(event).map((line) => paint('bad', line));
    case 'resumed':
      return wrapped(
        event.round === 0
          ? 'The coordinator was started again and takes this run up from its journal.'
          : `The coordinator was started again; from its journal this run goes on after round ${event.round}.`,
        width,
        2,
      );
    case 'outcome':
      return outcomeLines(event, memory, width, paint);
  }
}

function acceptedLines(event: Extract<LogEvent, { event: 'accepted' }>, width: number): string[] {
  const sites =
    'least' in event.sites
      ? `at least ${counted(event.sites.least, 'site')}`
      : `${counted(event.sites.length, 'site')}: ${listed(namesWithin(event.sites, width), 8)}`;
  return [
    ...wrapped(`“${shortened(event.title, width - 3)}”`, width),
    ...wrapped(`Run ${event.run} is accepted, over ${sites}.`, width, 2),
    ...(event.startFrom === undefined
      ? []
      : wrapped(`It starts from the coefficients of run ${event.startFrom}.`, width, 2)),
    `Specification ${event.digest.slice(0, Math.min(event.digest.length, width - 14, 16))}`,
  ];
}

function surveyLines(event: Extract<LogEvent, { event: 'survey' }>, width: number, paint: Paint): string[] {
  const total = `The survey found ${counted(event.rowsTotal, 'row')} at ${counted(event.sites.length, 'site')} for ${counted(event.coefficients, 'coefficient')}, in ${duration(event.tookMs)}.`;
  const perSite = event.sites.map(
    (site) =>
      `${shortened(site.site, 24)} ${grouped(site.rowsUsed)}${site.rowsDropped > 0 ? ` (left out: ${grouped(site.rowsDropped)})` : ''}`,
  );
  return [
    ...wrapped(total, width, 2),
    ...wrapped(`Rows: ${listed(perSite, 12)}.`, width, 4, 2),
    ...wrapped(`The rung is ${event.rung}: ${sentence(event.rungReason)}`, width, 2),
    ...event.notes.flatMap((note) => wrapped(`Note: ${sentence(note)}`, width, 2)),
    ...wrapped(
      `Below, how far each round is off the optimum (relative): the mark walks to the post at the tolerance, ${MARKS.measured} measured, ${MARKS.guessed} guessed.`,
      width,
      2,
    ).map((line) => paint('faint', line)),
  ];
}

function roundLine(event: RoundEvent, memory: Memory, width: number, paint: Paint): string {
  const cells = barWidth(width);
  const drawn = bar(event.relativeGap, event.tolerance, event.gapMeasured, cells);
  const text = roundSentence(event, timeLeftMs(memory.recent), width - cells - 1);
  return `${painted(drawn, paint)} ${text}`;
}

/** The bar with its mark in one tone and the way still to go in another. */
function painted(drawn: string, paint: Paint): string {
  const at = [...drawn].findIndex((cell) => cell === MARKS.measured || cell === MARKS.guessed);
  if (at < 0) return paint('faint', drawn);
  return `${drawn.slice(0, at)}${paint('mark', drawn.slice(at, at + 1))}${paint('faint', drawn.slice(at + 1))}`;
}

function outcomeLines(
  event: Extract<LogEvent, { event: 'outcome' }>,
  memory: Memory,
  width: number,
  paint: Paint,
): string[] {
  const head = OUTCOME_HEAD[event.outcome];
  const rows = memory.rows === null ? '' : ` over ${counted(memory.rows, 'row')}`;
  const sites = memory.siteCount === null ? '' : ` at ${counted(memory.siteCount, 'site')}`;
  const title = memory.title === null ? 'The run' : `“${shortened(memory.title, Math.max(16, width - 40))}”`;
  const without = event.without.length === 0 ? '' : `, without ${listed(event.without, 8)}`;
  const took = `${title} took ${counted(event.rounds, 'round')}${rows}${sites}${without}.`;
  const reason = event.reason === null ? '' : ` ${sentence(event.reason)}`;
  const certificate =
    event.outcome === 'solved' || event.relativeGap !== null
      ? ` ${certificateText(event.certificate, event.relativeGap)}${toleranceText(event.relativeGap, memory.tolerance)}`
      : '';
  const [first = '', ...rest] = wrapped(`${head} ${took}${reason}${certificate}`, width);
  const shown = first.startsWith(head)
    ? `${paint(event.outcome === 'solved' ? 'good' : 'bad', head)}${first.slice(head.length)}`
    : paint('bad', first);
  return ['', shown, ...rest, ...(memory.served ? whereLines(event.folder, memory.run, width) : [])];
}

const whereLines = (folder: string, run: string | null, width: number): string[] => [
  ...wrapped(`The result folder, on the coordinator's machine: ${folder}`, width),
  ...(run === null ? [] : wrapped(`To read the result: commonfit result ${run}`, width)),
];

const toleranceText = (gap: number | null, tolerance: number | null): string =>
  gap === null || tolerance === null ? '' : ` The tolerance is ${tolerance}.`;
