import type { ResultDocument } from '../run/result.js';
import { listed, roughly, shortened, wrapped } from './phrases.js';

/** Coefficients shown, those that moved most first. */
const MOVED_MOST = 40;
const DIGITS = 5;
const NAMES_MOST = 8;

/** What moved since the run that this one was started from; nothing where it was not. */
export function movedText({ startedFrom, moved, fits, chosen }: ResultDocument, width: number): string[] {
  if (startedFrom === null || moved === null || chosen === null) return [];
  const rows = Object.entries(moved).sort(([, a], [, b]) => sizeOf(b) - sizeOf(a));
  const now = fits[chosen].coefficients;
  const added = Object.keys(now).filter((name) => !Object.hasOwn(startedFrom.coefficients, name));
  const gone = Object.keys(startedFrom.coefficients).filter((name) => !Object.hasOwn(moved, name));
  const more = rows.length - MOVED_MOST;
  return [
    '',
    ...wrapped(`What moved since run ${startedFrom.run}, the most first: before, now, change.`, width),
    ...rows.slice(0, MOVED_MOST).map(([name, one]) => rowText(name, one, width)),
    ...(more > 0 ? [`  and ${more} more in result.json`] : []),
    ...(added.length === 0 ? [] : wrapped(`New here: ${listed(added, NAMES_MOST)}.`, width, 2)),
    ...(gone.length === 0 ? [] : wrapped(`No longer here: ${listed(gone, NAMES_MOST)}.`, width, 2)),
  ];
}

type Moved = NonNullable<ResultDocument['moved']>[string];

/** In standard errors where there are any, else beside what it was. */
const sizeOf = ({ before, change, changeInStandardErrors }: Moved): number =>
  Math.abs(changeInStandardErrors ?? change / Math.max(Math.abs(before), Number.MIN_VALUE));

function rowText(name: string, { before, after, change, changeInStandardErrors }: Moved, width: number) {
  const errors =
    changeInStandardErrors === null ? '' : ` (${roughly(changeInStandardErrors)} standard errors)`;
  const figures = `${figure(before)} → ${figure(after)}, ${change > 0 ? '+' : ''}${roughly(change)}${errors}`;
  return `  ${shortened(name, Math.max(12, width - figures.length - 4))}: ${figures}`;
}

const figure = (value: number): string => String(Number(value.toPrecision(DIGITS)));
