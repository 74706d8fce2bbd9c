import type { RoundEvent } from '../run/log-event.js';

/** Less than this is over before it is read. Milliseconds. */
const WORTH_SAYING_MS = 1000;
/** Rounds looked back on, fewest rounds a trend is read from, and how well a straight line must describe them. */
const LOOK_BACK = 8;
const FEWEST = 3;
const EXPLAINED_LEAST = 0.6;

/**
 * Milliseconds until the tolerance is reached, from the trend of ln(gap) over the recent rounds times their median
 * duration (one straggler says nothing of the next rounds); null where the rounds do not show a trend: too few, of another kind than the last one (rung, fits still
 * open, gap measured or guessed), not falling, scattered, or falling too slowly for the rounds that are left; and where less than a second is left.
 */
export function timeLeftMs(rounds: readonly RoundEvent[]): number | null {
  const last = rounds[rounds.length - 1];
  if (last === undefined || last.relativeGap === null) return null;
  if (last.relativeGap <= last.tolerance) return null;
  const recent = alike(rounds, last);
  if (recent.length < FEWEST) return null;
  const trend = fallOf(recent);
  if (trend === null) return null;
  const roundsLeft = Math.ceil(Math.log(last.relativeGap / last.tolerance) / trend);
  if (roundsLeft > last.roundsMost - last.round) return null;
  const leftMs = roundsLeft * medianOf(recent.map((round) => round.tookMs));
  return leftMs < WORTH_SAYING_MS ? null : leftMs;
}

/** The unbroken run of rounds up to the last one that can be compared with it. */
function alike(rounds: readonly RoundEvent[], last: RoundEvent): RoundEvent[] {
  const found: RoundEvent[] = [];
  for (let at = rounds.length - 1; at >= 0 && found.length < LOOK_BACK; at--) {
    const round = rounds[at] as RoundEvent;
    const same =
      round.rung === last.rung && round.fitsOpen === last.fitsOpen && round.gapMeasured === last.gapMeasured;
    if (!same || round.relativeGap === null || round.relativeGap <= 0) break;
    found.unshift(round);
  }
  return found;
}

/** Least-squares fall of ln(gap) a round, positive; null where it does not fall or a line does not describe it. */
function fallOf(rounds: readonly RoundEvent[]): number | null {
  const points = rounds.map((round) => ({ x: round.round, y: Math.log(round.relativeGap as number) }));
  const meanX = points.reduce((sum, point) => sum + point.x, 0) / points.length;
  const meanY = points.reduce((sum, point) => sum + point.y, 0) / points.length;
  let xx = 0;
  let xy = 0;
  let yy = 0;
  for (const { x, y } of points) {
    xx += (x - meanX) ** 2;
    xy += (x - meanX) * (y - meanY);
    yy += (y - meanY) ** 2;
  }
  if (!(xx > 0) || !(xy < 0)) return null;
  return (xy * xy) / (xx * yy) >= EXPLAINED_LEAST ? -xy / xx : null;
}

function medianOf(values: readonly number[]): number {
  const sorted = [...values].sort((a, b) => a - b);
  const middle = sorted.length >> 1;
  const upper = sorted[middle] as number;
  return sorted.length % 2 === 1 ? upper : ((sorted[middle - 1] as number) + upper) / 2;
}
