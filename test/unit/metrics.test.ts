import { describe, expect, test } from 'vitest';
import type { RoundEvent } from '../../coordinator/run/log-event.js';
import { Metrics } from '../../coordinator/service/metrics.js';
import type { RunSummary } from '../../coordinator/service/run-entry.js';

const AT = '2031-05-04T10:15:00.000Z';
const RUN = '20310504-101500-4f6c2a91';

const round: RoundEvent = {
  event: 'round',
  stage: 'solve',
  round: 4,
  roundsMost: 300,
  rung: 'proximal',
  purpose: 'proximal points',
  fitsOpen: 1,
  fitsTotal: 1,
  relativeGap: 0.25,
  gapMeasured: false,
  tolerance: 1e-8,
  primalResidual: 0.5,
  dualResidual: null,
  objective: 1.5,
  tookMs: 2000,
  standIns: [],
  slowest: { site: 'harrowmere', ms: 1900 },
  numbersUp: 30,
  numbersDown: 60,
  at: AT,
};

const summary = (state: RunSummary['state']): RunSummary => ({
  run: RUN,
  title: 'Breaks',
  digest: '',
  state,
  outcome: null,
  reason: null,
  round: 4,
  submittedAt: AT,
  folder: '',
});

const opened = (runs: readonly RunSummary[] = [], halted: string | null = null): Metrics =>
  new Metrics({
    runs: () => runs,
    halted: () => halted,
    traffic: () => new Map([['harrowmere', { sent: 700, received: 400, waiting: 5, links: 2 }]]),
  });

const lines = async (metrics: Metrics): Promise<string[]> =>
  (await metrics.text()).split('\n').filter((line) => !line.startsWith('#'));

describe('metrics', () => {
  test('rounds, their residuals and numbers, missed deadlines and answer times', async () => {
    const metrics = opened();
    metrics.event(RUN, round);
    metrics.event(RUN, {
      event: 'late',
      round: 5,
      sites: ['harrowmere#2', 'castlefen'],
      waitedMs: 30_000,
      patienceLeftMs: 1,
      at: AT,
    });
    metrics.answered('castlefen', 200);
    const text = await lines(metrics);
    for (const line of [
      'commonfit_rounds_total{rung="proximal"} 1',
      `commonfit_run_round{run="${RUN}"} 4`,
      `commonfit_run_relative_gap{run="${RUN}"} 0.25`,
      `commonfit_run_primal_residual{run="${RUN}"} 0.5`,
      'commonfit_numbers_total{direction="up"} 30',
      'commonfit_numbers_total{direction="down"} 60',
      'commonfit_deadlines_missed_total{site="harrowmere"} 1',
      'commonfit_deadlines_missed_total{site="castlefen"} 1',
      'commonfit_round_seconds_sum 2',
      'commonfit_answer_seconds_bucket{le="0.1",site="castlefen"} 0',
      'commonfit_answer_seconds_bucket{le="0.3",site="castlefen"} 1',
    ])
      expect(text).toContain(line);
    // there is no dual residual in this round
    expect(text.join('\n')).not.toContain('dual_residual{');
  });

  test('a run that has ended leaves no series of its own', async () => {
    const metrics = opened();
    metrics.event(RUN, round);
    metrics.event(RUN, {
      event: 'outcome',
      outcome: 'solved',
      reason: null,
      rounds: 4,
      relativeGap: 1e-9,
      certificate: 'measured',
      without: [],
      folder: '',
      at: AT,
    });
    const text = (await lines(metrics)).join('\n');
    expect(text).not.toContain(RUN);
    expect(text).toContain('commonfit_runs_ended_total{outcome="solved"} 1');
  });

  test('what is counted elsewhere is what it is when it is read, however often', async () => {
    const metrics = opened([summary('waiting'), summary('running'), summary('ended')], 'disk full');
    await metrics.text();
    const text = await lines(metrics);
    for (const line of [
      'commonfit_runs{state="waiting"} 1',
      'commonfit_runs{state="running"} 1',
      'commonfit_halted 1',
      'commonfit_links{site="harrowmere"} 2',
      'commonfit_send_queue_bytes{site="harrowmere"} 5',
      'commonfit_bytes_total{site="harrowmere",direction="down"} 700',
      'commonfit_bytes_total{site="harrowmere",direction="up"} 400',
    ])
      expect(text).toContain(line);
    expect(text.some((line) => line.startsWith('commonfit_nodejs_eventloop_lag_p99_seconds '))).toBe(true);
  });
});
