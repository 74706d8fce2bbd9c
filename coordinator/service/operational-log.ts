import { Writable } from 'node:stream';
import { type Logger, pino } from 'pino';
import { MARKS, roundSentence } from '../report/round-line.js';
import { roundLog } from '../report/round-log.js';
import type { LogEvent } from '../run/log-event.js';
import type { Notice } from './host-parts.js';
import type { ServiceSettings } from './settings.js';

/** Columns of a line in the operational log: sentences stay whole for whoever reads them. */
const LINE_WIDTH = 2000;
/** A round's sentence is short: its bar is for terminals. */
const ROUND_WIDTH = 160;

/**
 * The operational log on standard error: one JSON object a line, or one plain sentence. Where it cannot be written (a pipe
 * that ended, a full disk), lines are lost and runs go on. Tokens and numbers of sites never come here.
 */
export function openLog({ logLevel, log }: Pick<ServiceSettings, 'logLevel' | 'log'>): Logger {
  const stderr = pino.destination({ dest: 2, sync: true }).on('error', () => undefined);
  if (log === 'json') return pino({ level: logLevel }, stderr);
  const plain = new Writable({
    write: (line, _, done) => {
      stderr.write(plainLine(String(line)));
      done();
    },
  });
  return pino({ level: logLevel }, plain);
}

interface LogObject {
  readonly level: number;
  readonly time: number;
  readonly msg?: string;
  readonly run?: string;
  readonly site?: string;
  readonly code?: string;
  readonly err?: { readonly stack?: string };
}

/** `10:15:00  warn  4f6c2a91  Sentence. [code]`: the time of day, the level where it is not info, and the end of the run's id. */
export function plainLine(json: string): string {
  const { level, time, msg = '', run, site, code, err } = JSON.parse(json) as LogObject;
  const word = level >= 50 ? ['error'] : level >= 40 ? ['warn'] : level < 30 ? ['debug'] : [];
  const about = site === undefined || msg.includes(site) ? '' : `${site}: `;
  const tail = code === undefined ? '' : ` [${code}]`;
  const stack = err?.stack === undefined ? '' : `\n${err.stack}`;
  const head = [
    new Date(time).toTimeString().slice(0, 8),
    ...word,
    ...(run === undefined ? [] : [shortRun(run)]),
  ];
  return `${head.join('  ')}  ${about}${msg}${tail}${stack}\n`;
}

/** The part of a run's id that tells runs of one day apart. */
export const shortRun = (run: string): string => run.split('-').at(-1) ?? run;

export const noticeTo =
  (logger: Logger) =>
  ({ level, message, ...rest }: Notice): void =>
    logger[level](rest, message);

/** Tells the events of all runs as sentences; those of sites are told by the hub. */
export function runLines(notice: (notice: Notice) => void): (run: string, event: LogEvent) => void {
  const logs = new Map<string, ReturnType<typeof roundLog>>();
  return (run, event) => {
    const log = logs.get(run) ?? roundLog({ width: LINE_WIDTH, colour: false, served: true });
    logs.set(run, log);
    const lines = log.linesFor(event);
    if (event.event === 'outcome') logs.delete(run);
    if (event.event === 'site') return;
    const bad =
      event.event === 'late' ||
      event.event === 'without' ||
      (event.event === 'outcome' && event.outcome !== 'solved');
    const told = event.event === 'round' ? [roundSentence(event, null, ROUND_WIDTH)] : lines;
    for (const line of told) {
      // there are no bars here that a line could explain
      if (line !== '' && !line.includes(MARKS.measured))
        notice({ level: bad ? 'warn' : 'info', message: line.trim(), run });
    }
  };
}
