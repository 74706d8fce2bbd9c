import type { Measured } from '../journal/records.js';
import { resultOf } from '../run/documents.js';
import type { LogEvent } from '../run/log-event.js';
import { type Member, memberName, type RunEnd, type Shown } from '../run/run.js';
import type { Drive } from './drive.js';
import type { AcceptedRun } from './host-parts.js';

/** The round log's line for what the answers to one ask have shown, with the times that were measured. */
export function eventOfShown(
  shown: Shown,
  measured: Measured,
  roster: readonly Member[],
  { roundsMost, patienceMs }: { readonly roundsMost: number; readonly patienceMs: number },
): LogEvent {
  if (shown.kind === 'survey') {
    const { kind: _, ...survey } = shown;
    return { event: 'survey', ...survey, tookMs: measured.tookMs, at: measured.at };
  }
  if (shown.kind === 'without') {
    const { round, sites } = shown;
    return { event: 'without', round, sites, waitedMs: patienceMs, at: measured.at };
  }
  const { slowest, tookMs, numbersUp, numbersDown, at } = measured;
  const { progress } = shown;
  return {
    event: 'round',
    stage: shown.stage,
    round: shown.round,
    roundsMost,
    rung: progress.rung,
    purpose: progress.purpose,
    fitsOpen: shown.fitsOpen,
    fitsTotal: shown.fitsTotal,
    relativeGap: progress.relativeGap,
    gapMeasured: progress.gapMeasured,
    tolerance: shown.tolerance,
    primalResidual: progress.primalResidual,
    dualResidual: progress.dualResidual,
    objective: progress.objective,
    tookMs,
    standIns: shown.standIns,
    slowest: slowest === null ? null : { site: memberName(roster[slowest.member]), ms: slowest.ms },
    numbersUp,
    numbersDown,
    at,
  };
}

/** The last line of the round log; of several fits, the certificate that bounds least. */
export function outcomeEvent(end: RunEnd, folder: string, at: string): LogEvent {
  const worst = end.result.fits
    .flatMap(({ certificate }) => (certificate === null ? [] : [certificate]))
    .reduce<{ kind: string; relativeGap: number } | null>(
      (most, next) => (most === null || next.relativeGap > most.relativeGap ? next : most),
      null,
    );
  return {
    event: 'outcome',
    outcome: end.outcome,
    reason: end.reason,
    rounds: end.result.rounds,
    relativeGap: worst?.relativeGap ?? null,
    certificate: worst?.kind ?? null,
    without: end.result.without.map(({ site }) => site),
    folder,
    at,
  };
}

/** The end of a run that did not return by itself: no fit, and whatever `drive` had learned about the sites. */
export function forcedEnd(
  ending: { readonly outcome: RunEnd['outcome']; readonly reason: string },
  { specification, digest }: Pick<AcceptedRun, 'specification' | 'digest'>,
  drive: Pick<Drive, 'roster' | 'survey' | 'without' | 'round' | 'tally'> | null,
): RunEnd {
  const without = drive?.without ?? [];
  const present = [...(drive?.roster.entries() ?? [])]
    .map(([index, { kernel, ...member }]) => ({ index, site: memberName(member), kernel }))
    .filter(({ site }) => without.every((left) => left.site !== site));
  const survey = drive?.survey ?? null;
  const rowsOf = (name: string) => survey?.sites.find(({ site }) => site === name);
  const numbers = drive?.tally.numbers() ?? [];
  const result = resultOf({ specification, digest }, ending, {
    sites: present.map(({ site, kernel }) => ({
      site,
      rowsUsed: rowsOf(site)?.rowsUsed ?? null,
      rowsDropped: rowsOf(site)?.rowsDropped ?? null,
      kernel,
    })),
    without,
    rowsTotal: survey?.rowsTotal ?? null,
    rung: survey?.rung ?? null,
    rungReason: survey?.rungReason ?? null,
    notes: survey?.notes ?? [],
    rounds: drive?.round ?? 0,
    numbersSent: present.map(({ index, site }) => ({ site, ...numbers[index] })),
  });
  return { outcome: ending.outcome, reason: ending.reason, shown: null, result };
}
