import type { RoundEvent } from '../run/log-event.js';
import { duration, roughly, shortened } from './phrases.js';

/** Marks of the bar: where the run stands (measured, guessed), the way still to go, and the tolerance. */
export const MARKS = { measured: '◆', guessed: '◇', way: '·', tolerance: '┃' } as const;

/** Columns of the bar at a terminal width: at 80 and less the sentence needs the room. */
export const barWidth = (width: number): number => (width >= 100 ? 24 : width >= 72 ? 12 : 8);

/**
 * The distance to the tolerance on a log scale that starts at 1: blank is done, dots are still to go, and the mark
 * stands on the post at the end only if the gap is within the tolerance.
 */
export function bar(gap: number | null, tolerance: number, measured: boolean, cells: number): string {
  if (gap === null) return `${' '.repeat(cells - 1)}${MARKS.tolerance}`;
  const mark = measured ? MARKS.measured : MARKS.guessed;
  if (gap <= tolerance) return `${' '.repeat(cells - 1)}${mark}`;
  const share = Math.min(1, Math.max(0, Math.log(gap) / Math.log(tolerance)));
  const at = Math.min(cells - 2, Math.floor(share * (cells - 1) + 1e-9));
  return `${' '.repeat(at)}${mark}${MARKS.way.repeat(cells - 2 - at)}${MARKS.tolerance}`;
}

/** The sentence of a round in at most `width` columns: the fullest wording that fits. */
export function roundSentence(round: RoundEvent, leftMs: number | null, width: number): string {
  for (const wording of wordings(round, leftMs, width)) {
    if ([...wording].length <= width) return wording;
  }
  return `${shortened(standing(round, 'short'), width - 1)}.`;
}

function* wordings(round: RoundEvent, leftMs: number | null, width: number): Generator<string> {
  const left = leftMs === null ? '' : `; ${duration(leftMs)} left`;
  const fits =
    round.fitsTotal > 1 && round.fitsOpen > 0 ? `, ${round.fitsOpen} of ${round.fitsTotal} fits open` : '';
  const slow = round.slowest;
  if (width >= 80) {
    const last = slow === null ? '' : `; ${slow.site} answered last, after ${duration(slow.ms)}`;
    yield `${standing(round, 'long')}${fits}${last}${left.replace('; ', '; about ')}.`;
    yield `${standing(round, 'middle')}${fits}${last}${left}.`;
  }
  const last = (name: number, timed: boolean): string =>
    slow === null ? '' : `; ${shortened(slow.site, name)} last${timed ? ` (${duration(slow.ms)})` : ''}`;
  const open = fits === '' ? '' : `, ${round.fitsOpen} fits open`;
  const short = standing(round, 'short');
  for (const name of [40, 24, 16, 11, 8]) yield `${short}${open}${last(name, true)}${left}.`;
  for (const name of [24, 16, 11, 8]) yield `${short}${open}${last(name, false)}${left}.`;
  for (const name of [24, 16, 11, 8]) yield `${short}${open}${last(name, true)}.`;
  yield `${short}${last(8, false)}.`;
  yield `${short}.`;
}

/** `Round 12 is about 2.4e-4 off`: how far the run stands from the optimum, or what the round was for. */
function standing(round: RoundEvent, length: 'long' | 'middle' | 'short'): string {
  const head = `Round ${round.round}${round.stage === 'describe' ? ', for the report,' : ''}`;
  const gap = round.relativeGap;
  if (gap === null) return `Round ${round.round} gathered ${round.purpose}`;
  const size = `${round.gapMeasured ? '' : 'about '}${roughly(gap)}`;
  const off = length === 'short' ? 'off' : 'off the optimum';
  return length === 'long' ? `${head} (${round.purpose}) is ${size} ${off}` : `${head} is ${size} ${off}`;
}
